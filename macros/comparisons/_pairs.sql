{# What comparisons of two groups share: the reference, the name of a pair, the adjustment of p-values. #}

{% macro _adjustments() %}
    {{ return(['none', 'bonferroni', 'holm', 'benjamini-hochberg']) }}
{% endmacro %}


{# `wanted`: whether the call asks for comparisons with a reference; `because` says what made it so. #}
{% macro _check_reference(caller_name, reference, wanted, because) %}
    {%- if reference is none and wanted -%}
        {%- do spellcurve._fail(caller_name, because ~ ', which needs a reference; give one of the group values.') -%}
    {%- elif reference is not none and not wanted -%}
        {%- do spellcurve._fail(
            caller_name, 'reference is ' ~ spellcurve._shown(reference) ~ ' but ' ~ because ~ "; give pairs='reference' or no reference."
        ) -%}
    {%- elif reference is not none and (reference is boolean or (reference is not string and reference is not number)) -%}
        {%- do spellcurve._fail(
            caller_name, 'reference is ' ~ spellcurve._shown(reference) ~ '; it must be one of the group values, a text or a number.'
        ) -%}
    {%- endif -%}
{% endmacro %}


{# Whether a group is the reference: a number is compared as a number, a text with the group's text. #}
{% macro _is_reference(group, reference) %}
    {%- if reference is number -%}
        {{ return(group ~ ' = ' ~ reference) }}
    {%- else -%}
        {{ return(spellcurve._as_text(group) ~ ' = ' ~ spellcurve._text(reference)) }}
    {%- endif -%}
{% endmacro %}


{# 'a vs b'; a group without a value is shown as null. #}
{% macro _versus(group_a, group_b) %}
    {{ return(dbt.concat(['coalesce(' ~ group_a ~ ", 'null')", "' vs '", 'coalesce(' ~ group_b ~ ", 'null')"])) }}
{% endmacro %}


{#
    The CTE `<name>` (and one before it): the rows of a CTE with <p_value>_adjusted, for the rows that meet `condition`. `family`: the
    columns that tell one family of tests from another. Tests without a p-value do not count. Holm 1979; Benjamini and Hochberg 1995.
#}
{% macro _adjusted(cte, name, p_value, adjustment, family, condition) -%}
{%- if adjustment in ('none', 'bonferroni') -%}
{{ name }} as (
    select
        *,
        case
            {%- if adjustment == 'none' %}
            when {{ condition }} then {{ p_value }}
            {%- else %}
            when {{ condition }} and {{ p_value }} is not null
                then least(1, {{ p_value }} * count({{ p_value }}) over ({{ spellcurve._throughout(family) }}))
            {%- endif %}
        end as {{ p_value }}_adjusted
    from {{ cte }}
)
{%- else -%}
{%- set smallest_first = 'order by case when ' ~ p_value ~ ' is null then 1 else 0 end, ' ~ p_value -%}
ranked_for_{{ name }} as (
    select
        *,
        row_number() over ({{ spellcurve._partition_by(family) }}{{ smallest_first }}) as {{ p_value }}_rank,
        count({{ p_value }}) over ({{ spellcurve._throughout(family) }}) as {{ p_value }}_count
    from {{ cte }}
),

{{ name }} as (
    select
        *,
        case
            when {{ condition }} and {{ p_value }} is not null
                {%- if adjustment == 'holm' %}
                then least(1, max(({{ p_value }}_count + 1 - {{ p_value }}_rank) * {{ p_value }}) over (
                    {{ spellcurve._partition_by(family) }}order by {{ p_value }}_rank rows between unbounded preceding and current row
                ))
                {%- else %}
                then least(1, min({{ p_value }}_count * {{ p_value }} / {{ p_value }}_rank) over (
                    {{ spellcurve._partition_by(family) }}order by {{ p_value }}_rank desc rows between unbounded preceding and current row
                ))
                {%- endif %}
        end as {{ p_value }}_adjusted
    from ranked_for_{{ name }}
)
{%- endif -%}
{%- endmacro %}
