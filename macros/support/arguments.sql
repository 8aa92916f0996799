{# Checks of arguments. Each stops compilation with one sentence: what was given, what is allowed, and where. #}

{% macro _fail(caller_name, sentence) %}
    {%- set place = ' In model ' ~ model.name ~ '.' if model is defined and model and model.name is defined else '' -%}
    {{ exceptions.raise_compiler_error('spellcurve.' ~ caller_name ~ ': ' ~ sentence ~ place) }}
{% endmacro %}


{% macro _check_call(caller_name, required, allowed, extra_named, extra_positional) %}
    {%- for name in extra_named -%}
        {%- do spellcurve._fail(caller_name, "unknown argument '" ~ name ~ "'; it takes " ~ allowed | join(', ') ~ '.') -%}
    {%- endfor -%}
    {%- if extra_positional -%}
        {%- do spellcurve._fail(caller_name, 'too many arguments; it takes ' ~ allowed | join(', ') ~ '.') -%}
    {%- endif -%}
    {%- for name, value in required.items() -%}
        {%- if value is undefined or value is none or value == '' -%}
            {%- do spellcurve._fail(caller_name, "argument '" ~ name ~ "' is missing; give " ~ spellcurve._what_to_give(name) ~ '.') -%}
        {%- endif -%}
    {%- endfor -%}
{% endmacro %}


{% macro _what_to_give(name) %}
    {%- if name in ('relation', 'spells', 'curve', 'origins', 'events') -%}
        {{ return("a relation such as ref('…') or source('…', '…'), or the name of a CTE") }}
    {%- elif name in ('opens', 'closes', 'active', 'sources', 'durations', 'shares', 'horizons') -%}
        {{ return('a value or a list of values') }}
    {%- elif name in ('lapse_after', 'width', 'horizon', 'survived', 'hazard_ratio') -%}
        {{ return('a number') }}
    {%- else -%}
        {{ return('the name of a column') }}
    {%- endif -%}
{% endmacro %}


{% macro _check_choice(caller_name, argument, value, allowed) %}
    {%- if value is not string or value not in allowed -%}
        {%- do spellcurve._fail(
            caller_name, argument ~ ' is ' ~ spellcurve._shown(value) ~ "; it must be one of '" ~ allowed | join("', '") ~ "'."
        ) -%}
    {%- endif -%}
{% endmacro %}


{% macro _check_flag(caller_name, argument, value) %}
    {%- if value is not boolean -%}
        {%- do spellcurve._fail(caller_name, argument ~ ' is ' ~ spellcurve._shown(value) ~ '; it must be true or false.') -%}
    {%- endif -%}
{% endmacro %}


{% macro _check_whole(caller_name, argument, value, at_least) %}
    {%- if value is boolean or value is not integer or value < at_least -%}
        {%- do spellcurve._fail(
            caller_name,
            argument ~ ' is ' ~ spellcurve._shown(value) ~ '; it must be a whole number of at least ' ~ at_least ~ '.'
        ) -%}
    {%- endif -%}
{% endmacro %}


{% macro _check_share(caller_name, argument, value) %}
    {%- if value is boolean or value is not number or value <= 0 or value >= 1 -%}
        {%- do spellcurve._fail(
            caller_name, argument ~ ' is ' ~ spellcurve._shown(value) ~ '; it must be a number between 0 and 1, both excluded.'
        ) -%}
    {%- endif -%}
{% endmacro %}


{# A list of column names, given as one name or a list. Refuses duplicates and names that the result itself uses. #}
{% macro _check_columns(caller_name, argument, value, taken) %}
    {%- set names = [value] if value is string else value -%}
    {%- if names is undefined or names is none or names is mapping or names is not sequence -%}
        {%- do spellcurve._fail(
            caller_name, argument ~ ' is ' ~ spellcurve._shown(value) ~ '; it must be a column name or a list of column names.'
        ) -%}
    {%- endif -%}
    {%- set seen = [] -%}
    {%- for name in names -%}
        {%- do spellcurve._check_column(caller_name, argument, name) -%}
        {%- set bare = spellcurve._bare(name) | lower -%}
        {%- if bare in taken -%}
            {%- do spellcurve._fail(
                caller_name, argument ~ " names the column '" ~ name ~ "', which the result uses itself; rename it before."
            ) -%}
        {%- endif -%}
        {%- if bare in seen -%}
            {%- do spellcurve._fail(caller_name, argument ~ " names the column '" ~ name ~ "' twice; name it once.") -%}
        {%- endif -%}
        {%- do seen.append(bare) -%}
    {%- endfor -%}
    {{ return(names | list) }}
{% endmacro %}


{% macro _check_column(caller_name, argument, name) %}
    {%- if name is not string or name | trim == '' -%}
        {%- do spellcurve._fail(caller_name, argument ~ ' is ' ~ spellcurve._shown(name) ~ '; it must be the name of a column.') -%}
    {%- endif -%}
{% endmacro %}


{% macro _check_values(caller_name, argument, value) %}
    {%- set values = [value] if value is string or value is number else value -%}
    {%- if values is undefined or values is none or values is mapping or values is not sequence or values | length == 0 -%}
        {%- do spellcurve._fail(caller_name, argument ~ ' is ' ~ spellcurve._shown(value) ~ '; it must be a value or a list of values.') -%}
    {%- endif -%}
    {{ return(values | list) }}
{% endmacro %}


{% macro _shown(value) %}
    {%- if value is undefined -%}
        {{ return('not given') }}
    {%- elif value is none -%}
        {{ return('none') }}
    {%- elif value is string -%}
        {{ return("'" ~ value ~ "'") }}
    {%- else -%}
        {{ return(value | string) }}
    {%- endif -%}
{% endmacro %}
