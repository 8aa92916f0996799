{% macro cohort_readout(
    spells, cohort, durations, by=[], period=none, confidence=0.95, interval_scale='log-log', minimum_at_risk=0, weights='whole'
) %}
    {%- do spellcurve._check_call(
        'cohort_readout', {'spells': spells, 'cohort': cohort, 'durations': durations},
        ['spells', 'cohort', 'durations', 'by', 'period', 'confidence', 'interval_scale', 'minimum_at_risk', 'weights'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('cohort_readout', 'spellcurve')(
        spells, cohort, durations, by, period, confidence, interval_scale, minimum_at_risk, weights
    )) }}
{% endmacro %}


{# A query without its provenance line, to stand inside another one that has its own. #}
{% macro _without_provenance(sql) %}
    {{ return(modules.re.sub('^\\s*/[*] spellcurve .*? [*]/\\s*', '', sql)) }}
{% endmacro %}


{% macro default__cohort_readout(
    spells, cohort, durations, by, period, confidence, interval_scale, minimum_at_risk, weights
) %}
    {%- set caller_name = 'cohort_readout' -%}
    {%- do spellcurve._check_column(caller_name, 'cohort', cohort) -%}
    {%- set by = spellcurve._check_columns(
        caller_name, 'by', by, spellcurve._survival_curve_columns() + spellcurve._survival_at_columns()
        + ['cohort', 'spells', 'naive_event_share', 'entry', 'event', 'weight']
    ) -%}
    {%- set durations = spellcurve._check_whole_list(caller_name, 'durations', durations, 0) -%}
    {%- if period is not none -%}
        {%- do spellcurve._check_choice(caller_name, 'period', period, ['month', 'quarter', 'year']) -%}
    {%- endif -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {%- do spellcurve._check_choice(caller_name, 'interval_scale', interval_scale, spellcurve._interval_scales()) -%}
    {%- do spellcurve._check_whole(caller_name, 'minimum_at_risk', minimum_at_risk, 0) -%}
    {%- do spellcurve._check_choice(caller_name, 'weights', weights, ['whole', 'fractional']) -%}
    {%- set column = spellcurve._column(cohort) -%}
    {%- if period is not none -%}
        {%- set column = spellcurve._date(dbt.date_trunc(period, spellcurve._date(column))) -%}
    {%- endif -%}
    {%- set plain_names = spellcurve._aliases(by, 'cohort_group_') -%}
    {%- set spells_of_cohorts -%}
(
    select {{ spellcurve._columns_as(by, plain_names) }}{{ column }} as cohort, entry, duration, event, weight
    from {{ spells }}
) as spells_of_cohorts
    {%- endset -%}
    {%- set curve = spellcurve._without_provenance(spellcurve.survival_curve(
        spells_of_cohorts, by=['cohort'] + plain_names, confidence=confidence, interval_scale=interval_scale,
        minimum_at_risk=minimum_at_risk, weights=weights
    )) -%}
    {%- set names = ['cohort'] + by -%}
    {%- set groups = spellcurve._aliases(names, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
    {%- set so_far = partition ~ 'order by duration rows between unbounded preceding and current row' -%}
    {%- set body -%}
with {{ spellcurve._curve_rows('(\n' ~ curve ~ '\n) as curves_of_cohorts', ['cohort'] + plain_names) }},

{{ spellcurve._listed('durations_wanted', 'wanted', durations) }},

rows_with_totals as (
    select
        {{ each_group }}duration, at_risk, events, censored, survival, survival_lower, survival_upper, previous_duration, next_duration,
        next_survival, next_at_risk, is_several_curves,
        sum(events + censored) over ({{ partition | trim }}) as spells,
        sum(events) over ({{ so_far }}) as events_so_far,
        sum(censored) over ({{ so_far }}) as censored_so_far
    from curve_rows
),

cells as (
    select
        {{ each_group }}wanted, survival, survival_lower, survival_upper, spells, events_so_far,
        censored_so_far - case when duration = wanted then censored else 0 end as censored_before,
        {{ spellcurve._at_risk_at('wanted') }} as at_risk,
        {{ spellcurve._status_at('wanted') }} as status
    from rows_with_totals
    cross join durations_wanted
    where {{ spellcurve._is_in_force('wanted') }}
)

select
    {{ spellcurve._aliases_as(groups, names) }}{{ spellcurve._integer('wanted') }} as duration,
    {{ spellcurve._count('spells', weights) }} as spells,
    {{ spellcurve._count('events_so_far', weights) }} as events,
    {{ spellcurve._count('censored_before', weights) }} as censored,
    case when status <> 'beyond_follow_up' then at_risk end as at_risk,
    case when status = 'observed' then survival end as survival,
    case when status = 'observed' then survival_lower end as survival_lower,
    case when status = 'observed' then survival_upper end as survival_upper,
    case when status = 'observed' then 1 - survival end as event_share,
    case when status = 'observed' then 1 - survival_upper end as event_share_lower,
    case when status = 'observed' then 1 - survival_lower end as event_share_upper,
    case
        when status <> 'too_few_at_risk' then {{ spellcurve._double('events_so_far') }} / nullif({{ spellcurve._double('spells') }}, 0)
    end as naive_event_share,
    status
from cells
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'spells': spells}, {
            'cohort': cohort, 'durations': durations, 'by': by, 'period': period, 'confidence': confidence,
            'interval_scale': interval_scale, 'minimum_at_risk': minimum_at_risk, 'weights': weights
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
