{#
    Who is at risk, who ends and who is censored at each duration, per group: the CTEs that end with `risk_sets`
    (group_1, …, duration, at_risk, events, censored, is_step; durations of entries are rows with is_step = 0).

    The spells are read once, by the aggregation `outcomes`; all that follows works on its few rows. Counting backwards from the longest
    duration keeps the last, small risk sets exact whatever the weights, and needs no frame that some warehouses evaluate slowly.
    A spell whose entry equals its duration, and is not 0, was under observation at no duration: it only makes its group known.
#}
{% macro _risk_sets(spells, by, horizon, weights) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set keys = [] -%}
    {%- for name in by -%}{%- do keys.append(spellcurve._column(name)) -%}{%- endfor -%}
    {%- set weight = spellcurve._double('weight') -%}
    {%- if horizon is none -%}
        {%- set entry, duration = 'entry', 'duration' -%}
    {%- else -%}
        {%- set entry = 'least(entry, ' ~ (horizon + 1) ~ ')' -%}
        {#- beyond the horizon only two things matter: that the spell was still there, and whether it was ever at risk -#}
        {%- set duration = 'case when duration <= ' ~ horizon ~ ' then duration when entry < duration then ' ~ (horizon + 2)
            ~ ' else ' ~ (horizon + 1) ~ ' end' -%}
    {%- endif -%}
outcomes as (
    select
        {{ spellcurve._columns_as(by, groups) }}{{ entry }} as entry,
        {{ duration }} as duration,
        sum(case when event = 1 then {{ weight }} else 0 end) as events,
        sum({{ weight }}) as spells
    from {{ spells }}
    group by {{ spellcurve._each_then_comma(keys) }}{{ entry }}, {{ duration }}
),

sides as (
    select 1 as side
    union all
    select 2 as side
    union all
    select 3 as side
    {%- if horizon is not none %}
    union all
    select 4 as side
    {%- endif %}
),

-- each outcome as it leaves the risk set (1), enters it late (2), and makes sure of the rows at 0 (3) and at the horizon (4)
turns as (
    select
        {{ each_group -}}
        case side when 1 then duration when 2 then entry when 3 then 0{% if horizon is not none %} else {{ horizon }}{% endif %} end as duration,
        case when side = 1 then events else 0 end as events,
        case when side = 1 then spells - events else 0 end as censored,
        case when side = 2 then spells else 0 end as entered,
        case when side = 2 then 0 else 1 end as is_step
    from outcomes
    cross join sides
    where
        side = 3
        or (side = 1 and (entry < duration or entry = 0))
        or (side = 2 and entry > 0 and entry < duration)
        {%- if horizon is not none %}
        or (side = 4 and duration > {{ horizon }} and entry < duration)
        {%- endif %}
),

changes as (
    select
        {{ each_group }}duration,
        sum(events) as events,
        sum(censored) as censored,
        sum(entered) as entered,
        max(is_step) as is_step
    from turns
    group by {{ each_group }}duration
),

risk_sets as (
    select
        {{ each_group }}duration, events, censored, is_step,
        {% set at_risk -%}
        sum(events + censored - entered) over (
            {{ spellcurve._partition_by(groups) }}order by duration desc rows between unbounded preceding and current row
        )
        {%- endset -%}
        {%- if weights == 'whole' -%}
        {{ at_risk }} as at_risk
        {%- else -%}
        case
            when {{ at_risk }} > 1e-12 * sum(events + censored + entered) over ({{ spellcurve._partition_by(groups) }})
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
