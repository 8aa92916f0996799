{# The CTE `name`: whole numbers in a column. #}
{% macro _whole_numbers(name, column, first, last) -%}
{{ name }} as (
    {%- for number in range(first, last + 1) %}
    select {{ number }} as {{ column }}
    {%- if not loop.last %}
    union all
    {%- endif %}
    {%- endfor %}
)
{%- endmacro %}


{#
    The CTE `name`: each row of a CTE as often as `times` says, with units_on = 0, 1, …, times - 1. Digit by digit, so that it is a plain
    join everywhere; up to 10 to the power of `digits` times a row.
#}
{% macro _repeated_rows(name, cte, times, digits=7) -%}
{{ spellcurve._whole_numbers('digits_of_' ~ name, 'digit', 0, 9) }},

{{ name }} as (
    {%- set parts = [] %}
    {%- for power in range(digits - 1, -1, -1) %}
    {%- do parts.append('digits_' ~ power ~ '.digit * ' ~ 10 ** power) %}
    {%- endfor %}
    select
        {{ cte }}.*,
        {{ parts | join(' + ') }} as units_on
    from {{ cte }}
    {%- for power in range(digits - 1, -1, -1) %}
    inner join digits_of_{{ name }} as digits_{{ power }} on {{ parts[:digits - power] | join(' + ') }} < {{ times }}
    {%- endfor %}
)
{%- endmacro %}
