{% macro time_to_events_needed(
    spells, hazard_ratio, power=0.8, alpha=0.05, allocation=0.5, sides=2, by=[], unit='day', intake=none, intake_lasts=none, longest=3650
) %}
    {%- do spellcurve._check_call(
        'time_to_events_needed', {'spells': spells, 'hazard_ratio': hazard_ratio},
        ['spells', 'hazard_ratio', 'power', 'alpha', 'allocation', 'sides', 'by', 'unit', 'intake', 'intake_lasts', 'longest'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('time_to_events_needed', 'spellcurve')(
        spells, hazard_ratio, power, alpha, allocation, sides, by, unit, intake, intake_lasts, longest
    )) }}
{% endmacro %}


{% macro _time_to_events_needed_columns() %}
    {{ return(['events_needed', 'hazard', 'intake', 'duration', 'spells_needed', 'status']) }}
{% endmacro %}


{# 1 - (1 - exp(-x)) / x for x >= 0, by its series where x is small; x is the name of a column. #}
{% macro _share_of_time_gone(x) %}
    {%- set coefficients = [0.0] -%}
    {%- set state = namespace(term=-1.0) -%}
    {%- for k in range(1, 11) -%}
        {%- set state.term = 0 - state.term / (k + 1) -%}
        {%- do coefficients.append(state.term) -%}
    {%- endfor -%}
    {{ return(
        'case when ' ~ x ~ ' < 0.1e0 then ' ~ spellcurve._horner(x, coefficients) ~ ' else 1 - (1 - ' ~ spellcurve._exp('0 - ' ~ x)
        ~ ') / ' ~ x ~ ' end'
    ) }}
{% endmacro %}


{% macro default__time_to_events_needed(
    spells, hazard_ratio, power, alpha, allocation, sides, by, unit, intake, intake_lasts, longest
) %}
    {%- set caller_name = 'time_to_events_needed' -%}
    {%- set needed = spellcurve._rounded_up(spellcurve._schoenfeld(caller_name, hazard_ratio, power, alpha, allocation, sides)) -%}
    {%- set by = spellcurve._check_columns(caller_name, 'by', by, spellcurve._time_to_events_needed_columns()) -%}
    {%- do spellcurve._check_choice(caller_name, 'unit', unit, ['day', 'week', 'month', 'hour', 'minute']) -%}
    {%- if intake is not none and (intake is boolean or intake is not number or intake <= 0) -%}
        {%- do spellcurve._fail(
            caller_name, 'intake is ' ~ spellcurve._shown(intake) ~ '; it must be a number above 0, of spells that begin in a unit.'
        ) -%}
    {%- endif -%}
    {%- if intake_lasts is not none -%}
        {%- do spellcurve._check_whole(caller_name, 'intake_lasts', intake_lasts, 1) -%}
    {%- endif -%}
    {%- do spellcurve._check_whole(caller_name, 'longest', longest, 1) -%}
    {%- if longest > 100000 -%}
        {%- do spellcurve._fail(caller_name, 'longest is ' ~ longest ~ '; it must not be above 100000.') -%}
    {%- endif -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set weight = spellcurve._double('weight') -%}
    {%- set keys = [] -%}
    {%- for name in by -%}{%- do keys.append(spellcurve._column(name)) -%}{%- endfor -%}
    {%- set body -%}
with tallies as (
    select
        {{ spellcurve._columns_as(by, groups) }}
        {%- if intake is none %}
        min(case when entry = 0 then started_at end) as first_start,
        max(last_seen_at) as last_seen,
        {%- endif %}
        sum(case when entry = 0 then {{ weight }} else 0 end) as begun,
        sum(case when event = 1 and (entry < duration or duration = 0) then {{ weight }} else 0 end) as events,
        sum({{ weight }} * (duration - entry)) as time_at_risk
    from {{ spells }}
    {%- if by %}
    group by {{ keys | join(', ') }}
    {%- endif %}
),

{% if intake is none -%}
-- the table is known up to when anybody was last seen
tallies_with_end as (
    select
        {{ each_group }}begun, events, time_at_risk, first_start,
        max(last_seen) over () as last_moment
    from tallies
),

{% endif -%}
tallies_with_period as (
    select
        {{ each_group }}begun, events, time_at_risk,
        {{ spellcurve._completed_units('first_start', 'last_moment', unit) if intake is none else 'null' }} as period
    from {{ 'tallies_with_end' if intake is none else 'tallies' }}
),

rates as (
    select
        {{ each_group -}}
        case when time_at_risk > 0 then events / time_at_risk end as hazard,
        {%- if intake is none %}
        case when period > 0 then begun / period end as intake
        {%- else %}
        {{ spellcurve._double_literal(intake) }} as intake
        {%- endif %}
    from tallies_with_period
),

arms as (
    select {{ spellcurve._double_literal(allocation) }} as share, {{ spellcurve._double_literal(hazard_ratio) }} as factor
    union all
    select {{ spellcurve._double_literal(1 - allocation) }} as share, 1e0 as factor
),

rates_of_arms as (
    select {{ each_group }}hazard, intake, share, hazard * factor as own_hazard
    from rates
    cross join arms
),

{{ spellcurve._repeated_rows('units', 'rates_of_arms', longest) }},

-- the unit at whose end the comparison is looked at, how long spells were taken in until then, and how long none were
times as (
    select
        {{ each_group }}hazard, intake, share, own_hazard,
        units_on + 1 as duration,
        {{ 'units_on + 1' if intake_lasts is none else 'least(units_on + 1, ' ~ intake_lasts ~ ')' }} as taking_in,
        {{ '0' if intake_lasts is none else 'greatest(units_on + 1 - ' ~ intake_lasts ~ ', 0)' }} as waiting
    from units
),

hazards_so_far as (
    select
        {{ each_group }}hazard, intake, share, duration, taking_in,
        own_hazard * taking_in as hazard_taking_in,
        own_hazard * waiting as hazard_waiting
    from times
),

shares_gone as (
    select
        {{ each_group }}hazard, intake, share, duration, taking_in, hazard_waiting,
        {{ spellcurve._share_of_time_gone('hazard_taking_in') }} as gone,
        {{ spellcurve._share_of_time_gone('hazard_waiting') }} as gone_waiting
    from hazards_so_far
),

expected_events as (
    select
        {{ each_group }}hazard, intake, duration, taking_in,
        sum(share * intake * taking_in * (gone + (1 - gone) * hazard_waiting * (1 - gone_waiting))) as expected
    from shares_gone
    group by {{ each_group }}hazard, intake, duration, taking_in
),

times_needed as (
    select
        {{ each_group }}hazard, intake,
        min(case when expected >= {{ needed }} * (1 - 1e-9) then duration end) as duration
    from expected_events
    group by {{ each_group }}hazard, intake
)

select
    {{ spellcurve._aliases_as(groups, by) }}{{ spellcurve._integer(needed) }} as events_needed,
    {{ spellcurve._double('hazard') }} as hazard,
    {{ spellcurve._double('intake') }} as intake,
    {{ spellcurve._integer('duration') }} as duration,
    {{ spellcurve._double(
        'intake * ' ~ ('duration' if intake_lasts is none else 'least(duration, case when duration is not null then ' ~ intake_lasts ~ ' end)')
    ) }} as spells_needed,
    case
        when hazard is null then 'no_time_at_risk'
        when hazard = 0 then 'no_events'
        when intake is null or intake = 0 then 'no_intake'
        when duration is not null then 'reached'
        {%- if intake_lasts is not none %}
        when intake * {{ intake_lasts }} <= {{ needed }} then 'never_reached'
        {%- endif %}
        else 'not_within_longest'
    end as status
from times_needed
    {%- endset -%}
    {{ return(
        spellcurve._provenance(caller_name, {'spells': spells}, {
            'hazard_ratio': hazard_ratio, 'power': power, 'alpha': alpha, 'allocation': allocation, 'sides': sides, 'by': by, 'unit': unit,
            'intake': intake, 'intake_lasts': intake_lasts, 'longest': longest
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
