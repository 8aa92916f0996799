{#
    Who is at risk, who ends and who is censored at each duration, per group: the CTEs that end with `risk_sets`
    (group_1, …, duration, at_risk, events, censored, is_step; durations of entries are rows with is_step = 0).

    The spells are read once, by _outcomes; all that follows works on its few rows. Counting backwards from the longest
    duration keeps the last, small risk sets exact whatever the weights, and needs no frame that some warehouses evaluate slowly.
#}
{% macro _risk_sets(spells, by, horizon, weights) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
{{ spellcurve._turns(spells, by, horizon) }},

changes as (
    select
        {{ each_group }}duration,
        sum(events) as events,
        sum(leaving - events) as censored,
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


{#
    Who leaves the risk set at a duration and who enters it late after it: the CTEs that end with `turns` (group_1, …, duration, own_cause if
    it is given as an expression, events, leaving, entered, is_step). Every group has a row at 0, and one at the horizon if it comes so far.
    A spell whose entry equals its duration, and is not 0, was under observation at no duration: it only makes its group known.
#}
{% macro _turns(spells, by, horizon, own_cause=none) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set names = groups + ([] if own_cause is none else ['own_cause']) -%}
    {%- set keys = [] -%}
    {%- for name in by -%}{%- do keys.append(spellcurve._column(name)) -%}{%- endfor -%}
    {%- if own_cause is not none -%}{%- do keys.append(own_cause) -%}{%- endif -%}
    {%- set longest, latest = 'duration', 'entry' -%}
    {%- if horizon is not none -%}
        {%- set latest = 'least(entry, ' ~ (horizon + 1) ~ ')' -%}
        {#- beyond the horizon only two things matter: that the spell was still there, and whether it was ever at risk -#}
        {%- set longest = 'case when duration <= ' ~ horizon ~ ' then duration when entry < duration then ' ~ (horizon + 2)
            ~ ' else ' ~ (horizon + 1) ~ ' end' -%}
    {%- endif -%}
{{ spellcurve._outcomes(spells, keys, names, longest, latest) }},

{{ spellcurve._whole_numbers('sides', 'side', 1, 3 if horizon is none else 4) }},

-- each outcome as it leaves the risk set (1), enters it late (2), and makes sure of the rows at 0 (3) and at the horizon (4)
turns as (
    select
        {{ spellcurve._each_then_comma(groups) -}}
        case side when 1 then left_at when 2 then entered_at when 3 then 0{% if horizon is not none %} else {{ horizon }}{% endif %} end as duration,
        {%- if own_cause is not none %}
        case when side = 1 then own_cause end as own_cause,
        {%- endif %}
        case when side = 1 then events else 0 end as events,
        case when side = 1 then spells else 0 end as leaving,
        case when side = 2 then spells else 0 end as entered,
        case when side = 2 then 0 else 1 end as is_step
    from outcomes
    cross join sides
    where
        side = 3
        or (side = 1 and left_at is not null)
        or (side = 2 and entered_at is not null)
        {%- if horizon is not none %}
        or (side = 4 and left_at > {{ horizon }})
        {%- endif %}
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
