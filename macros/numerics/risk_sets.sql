{#
    Who is at risk, who ends and who is censored at each duration, per group: the CTEs that end with `risk_sets`
    (group_1, …, duration, at_risk, events, censored, is_step; durations of entries are rows with is_step = 0).

    The spells are read once, by _changes; all that follows works on its few rows. Counting backwards from the longest
    duration keeps the last, small risk sets exact whatever the weights, and needs no frame that some warehouses evaluate slowly.
#}
{% macro _risk_sets(spells, by, horizon, weights) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
{{ spellcurve._changes(spells, by, horizon) }},

risk_sets as (
    select
        {{ each_group }}duration, events, leaving - events as censored, is_step,
        {% set at_risk -%}
        sum(leaving - entered) over (
            {{ spellcurve._partition_by(groups) }}order by duration desc rows between unbounded preceding and current row
        )
        {%- endset -%}
        {%- if weights == 'whole' -%}
        {{ at_risk }} as at_risk
        {%- else -%}
        case
            when {{ at_risk }} > 1e-12 * sum(leaving + entered) over ({{ spellcurve._partition_by(groups) }})
                then {{ at_risk }}
            else 0
        end as at_risk
        {%- endif %}
    from changes
)
{%- endmacro %}


{# A count as the result shows it: a whole number, and null rather than rounded where a weight was fractional. #}
{% macro _count(expression, weights) %}
    {%- if weights == 'fractional' -%}
        {{ return(spellcurve._double(expression)) }}
    {%- else -%}
        {{ return(spellcurve._integer('case when floor(' ~ expression ~ ') = ' ~ expression ~ ' then ' ~ expression ~ ' end')) }}
    {%- endif -%}
{% endmacro %}
