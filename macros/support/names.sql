{# Names of columns, lists of them, and texts, as they stand in SQL. #}

{#
    A column's name as SQL: left as the user wrote it where the warehouse can read it so, quoted its way where it cannot or where the
    user put it in quotes.
#}
{% macro _column(name) %}
    {%- set plain = modules.re.match('^[A-Za-z_][A-Za-z0-9_]*$', name) -%}
    {%- set quoted = modules.re.match('^(".*"|`.*`|\\[.*\\])$', name) -%}
    {%- if plain and name | lower not in spellcurve._reserved_words() -%}
        {{ return(name) }}
    {%- else -%}
        {{ return(adapter.quote(spellcurve._bare(name) if quoted else name)) }}
    {%- endif -%}
{% endmacro %}


{# The name without its quotes. #}
{% macro _bare(name) %}
    {{ return(modules.re.sub('^["`\\[](.*)["`\\]]$', '\\1', name)) }}
{% endmacro %}


{% macro _texts(values) %}
    {%- set quoted = [] -%}
    {%- for value in values -%}
        {%- do quoted.append(spellcurve._text(value)) -%}
    {%- endfor -%}
    {{ return(quoted | join(', ')) }}
{% endmacro %}


{# [prefix_1, prefix_2, …], one for each item: names that cannot clash with the user's. #}
{% macro _aliases(items, prefix) %}
    {%- set aliases = [] -%}
    {%- for item in items -%}
        {%- do aliases.append(prefix ~ loop.index) -%}
    {%- endfor -%}
    {{ return(aliases) }}
{% endmacro %}


{# 'a, b, ' — so that a list which may be empty can stand before other columns. #}
{% macro _each_then_comma(items) %}
    {{ return(items | join(', ') ~ (', ' if items else '')) }}
{% endmacro %}


{# 'plan as group_1, region as group_2, ' and the way back. #}
{% macro _columns_as(names, aliases) %}
    {%- set parts = [] -%}
    {%- for name in names -%}
        {%- do parts.append(spellcurve._column(name) ~ ' as ' ~ aliases[loop.index0] ~ ', ') -%}
    {%- endfor -%}
    {{ return(parts | join('')) }}
{% endmacro %}


{% macro _aliases_as(aliases, names) %}
    {%- set parts = [] -%}
    {%- for name in names -%}
        {%- do parts.append(aliases[loop.index0] ~ ' as ' ~ spellcurve._column(name) ~ ', ') -%}
    {%- endfor -%}
    {{ return(parts | join('')) }}
{% endmacro %}


{% macro _partition_by(items) %}
    {{ return('partition by ' ~ items | join(', ') ~ ' ' if items else '') }}
{% endmacro %}
