{% macro hazard_by_band(spells, by=[], width=none, confidence=0.95, horizon=none, weights='whole') %}
    {%- do spellcurve._check_call(
        'hazard_by_band', {'spells': spells, 'width': width}, ['spells', 'by', 'width', 'confidence', 'horizon', 'weights'], kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('hazard_by_band', 'spellcurve')(spells, by, width, confidence, horizon, weights)) }}
{% endmacro %}


{% macro default__hazard_by_band(spells, by, width, confidence, horizon, weights) %}
    {%- set caller_name = 'hazard_by_band' -%}
    {%- set by = spellcurve._check_columns(
        caller_name, 'by', by,
        ['from_duration', 'to_duration', 'events', 'time_at_risk', 'hazard', 'hazard_lower', 'hazard_upper', 'status']
    ) -%}
    {%- do spellcurve._check_whole(caller_name, 'width', width, 1) -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {%- if horizon is not none -%}
        {%- do spellcurve._check_whole(caller_name, 'horizon', horizon, 1) -%}
    {%- endif -%}
    {%- do spellcurve._check_choice(caller_name, 'weights', weights, ['whole', 'fractional']) -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
    {%- set body -%}
with {{ spellcurve._risk_sets(spells, by, horizon, weights) }},

-- as many as are at risk at a duration were at risk in each unit since the row before it
stretches as (
    select
        {{ each_group }}duration, events, at_risk,
        coalesce(lag(duration) over ({{ partition }}order by duration), 0) as after_duration
    from risk_sets
    {%- if horizon is not none %}
    where duration <= {{ horizon }}
    {%- endif %}
),

stretches_with_bands as (
    select
        {{ each_group }}duration, events, at_risk, after_duration,
        {{ spellcurve._integer('floor(' ~ spellcurve._double('after_duration') ~ ' / ' ~ width ~ ')') }} as first_band,
        {{ spellcurve._integer('floor(' ~ spellcurve._double('greatest(duration - 1, 0)') ~ ' / ' ~ width ~ ')') }} as last_band
    from stretches
),

{{ spellcurve._repeated_rows('units', 'stretches_with_bands', 'last_band - first_band + 1') }},

pieces as (
    select
        {{ each_group }}first_band + units_on as band,
        case when first_band + units_on = last_band then events else 0 end as events,
        at_risk * (
            least(duration, (first_band + units_on + 1) * {{ width }}) - greatest(after_duration, (first_band + units_on) * {{ width }})
        ) as time_at_risk
    from units
),

bands as (
    select
        {{ each_group }}band,
        sum(events) as events,
        sum(time_at_risk) as time_at_risk
    from pieces
    group by {{ each_group }}band
),

-- an interval needs a count: without one, or without time at risk, there is none
bands_with_operands as (
    select
        {{ each_group }}band, events, time_at_risk,
        case when time_at_risk > 0 then time_at_risk end as divisor,
        case when floor(events) = events then events end as whole_events
    from bands
)

select
    {{ spellcurve._aliases_as(groups, by) }}{{ spellcurve._integer('band * ' ~ width) }} as from_duration,
    {%- set to_duration = '(band + 1) * ' ~ width %}
    {{ spellcurve._integer('least(' ~ to_duration ~ ', ' ~ horizon ~ ')' if horizon is not none else to_duration) }} as to_duration,
    {{ spellcurve._count('events', weights) }} as events,
    {{ spellcurve._count('time_at_risk', weights) }} as time_at_risk,
    {{ spellcurve._double('events') }} / divisor as hazard,
    {{ spellcurve._poisson_limit('whole_events', confidence, -1) }} / divisor as hazard_lower,
    {{ spellcurve._poisson_limit('whole_events', confidence, 1) }} / divisor as hazard_upper,
    case when divisor is null then 'no_time_at_risk' else 'observed' end as status
from bands_with_operands
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'spells': spells}, {
            'by': by, 'width': width, 'confidence': confidence, 'horizon': horizon, 'weights': weights
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
