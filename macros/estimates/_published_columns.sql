{# Checks the options by which estimates say which rows and figures they publish. #}
{% macro _check_rows_wanted(caller_name, grid, horizon, minimum_at_risk, small_counts) %}
    {%- do spellcurve._check_choice(caller_name, 'grid', grid, ['steps', 'every']) -%}
    {%- do spellcurve._check_choice(caller_name, 'small_counts', small_counts, ['keep', 'hide']) -%}
    {%- do spellcurve._check_whole(caller_name, 'minimum_at_risk', minimum_at_risk, 0) -%}
    {%- if horizon is not none -%}
        {%- do spellcurve._check_whole(caller_name, 'horizon', horizon, 0) -%}
    {%- endif -%}
{% endmacro %}


{# Counts and estimates as they are published, in the type of their column; null where fewer than minimum_at_risk are at risk. #}
{% macro _published_columns(counts, estimates, minimum_at_risk, small_counts, weights, at_risk='at_risk') %}
    {%- set enough = 'case when ' ~ at_risk ~ ' >= ' ~ minimum_at_risk ~ ' then ' -%}
    {%- set columns = [] -%}
    {%- for name in counts -%}
        {%- set count = spellcurve._count(name, weights) -%}
        {%- set shown = enough ~ count ~ ' end' if small_counts == 'hide' and minimum_at_risk > 0 else count -%}
        {%- do columns.append(shown ~ ' as ' ~ name) -%}
    {%- endfor -%}
    {%- for name in estimates -%}
        {%- set figure = spellcurve._double(name) -%}
        {%- do columns.append((enough ~ figure ~ ' end' if minimum_at_risk > 0 else figure) ~ ' as ' ~ name) -%}
    {%- endfor -%}
    {{ return(columns | join(',\n    ')) }}
{% endmacro %}
