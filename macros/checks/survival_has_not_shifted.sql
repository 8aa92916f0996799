{#
    A generic test for a spell table, to be run on a schedule: a log-rank test of the spells' recent behaviour, or of the newest spells,
    against what came before. Where they differ it returns a row whose sentence says in which direction and by how much at a duration; dbt's
    severity makes that a failure or a warning. The sentence is also written to dbt's log, unless `say` is false.
#}
{% test survival_has_not_shifted(
    model, recent=none, at=30, compare='periods', baseline=none, alpha=0.01, as_of=none, unit='day', strata=[], weighting='log-rank', say=true
) %}
    {%- set sql = adapter.dispatch('_shifted_survival', 'spellcurve')(
        model, recent, at, compare, baseline, alpha, as_of, unit, strata, weighting
    ) -%}
    {%- do spellcurve._check_flag('survival_has_not_shifted', 'say', say) -%}
    {#- dbt puts the SQL of an ephemeral model before a test when it runs it, and not before a query -#}
    {%- if say and execute and flags.WHICH in ('test', 'build') and '__dbt__cte__' not in model | string -%}
        {%- for row in run_query(sql).rows -%}
            {%- do log('survival_has_not_shifted on ' ~ (model if model is string else model.identifier) ~ ': ' ~ row[0], info=true) -%}
        {%- endfor -%}
    {%- endif -%}
    {{ sql }}
{% endtest %}


{# A moment, given as itself or as a number of days (hours, minutes) before another. #}
{% macro _moment_or_back(caller_name, argument, value, from_moment, observation) %}
    {%- if value is boolean or value is not integer -%}
        {{ return(spellcurve._check_moment(caller_name, argument, value)) }}
    {%- endif -%}
    {%- do spellcurve._check_whole(caller_name, argument, value, 1) -%}
    {%- set back = modules.datetime.timedelta(
        days=value if observation.by_day else 0,
        hours=value if observation.unit == 'hour' else 0,
        minutes=value if observation.unit == 'minute' else 0
    ) -%}
    {{ return(
        (modules.datetime.datetime.strptime(from_moment, '%Y-%m-%d %H:%M:%S') - back).isoformat(' ')
    ) }}
{% endmacro %}


{# '74.3%' in SQL, from a share; written out digit by digit since warehouses write decimals in different ways. #}
{% macro _percent(share) %}
    {%- set tenths = 'floor(1000 * ' ~ share ~ ' + 0.5)' -%}
    {%- set whole = 'floor(' ~ tenths ~ ' / 10)' -%}
    {{ return(dbt.concat([
        spellcurve._as_text(spellcurve._integer(whole)), "'.'",
        spellcurve._as_text(spellcurve._integer(tenths ~ ' - 10 * ' ~ whole)), "'%'"
    ])) }}
{% endmacro %}


{# 'p = 0.0032', or 'p < 0.0001'. #}
{% macro _p_in_words(p_value) %}
    {%- set digits = spellcurve._as_text(spellcurve._integer('10000 + floor(10000 * ' ~ p_value ~ ' + 0.5)')) -%}
    {{ return(
        'case when ' ~ p_value ~ " < 0.0001 then 'p < 0.0001' else " ~ dbt.concat(["'p = 0.'", 'substr(' ~ digits ~ ', 2, 4)']) ~ ' end'
    ) }}
{% endmacro %}


{# A select of all figures, null but for those that this relation gives. #}
{% macro _figures_from(figures, source, given) %}
    select
        {%- for name in figures %}
        {{ spellcurve._double(given.get(name, 'null')) }} as {{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from {{ source }}
{%- endmacro %}


{% macro default___shifted_survival(model, recent, at, compare, baseline, alpha, as_of, unit, strata, weighting) %}
    {%- set caller_name = 'survival_has_not_shifted' -%}
    {%- if recent is none -%}
        {%- do spellcurve._fail(
            caller_name, "argument 'recent' is missing; give the date from which behaviour is recent, or a number of days before as_of."
        ) -%}
    {%- endif -%}
    {%- do spellcurve._check_whole(caller_name, 'at', at, 0) -%}
    {%- do spellcurve._check_choice(caller_name, 'compare', compare, ['periods', 'cohorts']) -%}
    {%- do spellcurve._check_share(caller_name, 'alpha', alpha) -%}
    {%- set strata = spellcurve._check_columns(caller_name, 'strata', strata, []) -%}
    {%- set weights = spellcurve._check_weighting(caller_name, weighting) -%}
    {%- set o = spellcurve._observation(caller_name, as_of, none, none, unit, [], 'sound', false) -%}
    {%- set cutoff = spellcurve._moment_or_back(caller_name, 'recent', recent, o.as_of, o) -%}
    {%- if cutoff >= o.as_of -%}
        {%- do spellcurve._fail(
            caller_name, 'recent is ' ~ spellcurve._shown(recent) ~ ", which is not before as_of '" ~ o.as_of ~ "'; it must be."
        ) -%}
    {%- endif -%}
    {%- set begin = none if baseline is none else spellcurve._moment_or_back(caller_name, 'baseline', baseline, cutoff, o) -%}
    {%- if begin is not none and begin >= cutoff -%}
        {%- do spellcurve._fail(
            caller_name, 'baseline is ' ~ spellcurve._shown(baseline) ~ ", which is not before the recent period, from '" ~ cutoff
            ~ "'; it must be."
        ) -%}
    {%- endif -%}
    {%- set cutoff_sql = spellcurve._moment_literal(cutoff) -%}
    {%- set begin_sql = none if begin is none else spellcurve._moment_literal(begin) -%}
    {%- set since = cutoff[:10] if o.by_day else cutoff -%}
    {%- set from_words = ' between ' ~ (begin[:10] if o.by_day else begin) ~ ' and ' ~ since if begin is not none else ' before ' ~ since -%}
    {%- set plain_strata = spellcurve._aliases(strata, 'stratum_') -%}
    {%- set each_stratum = spellcurve._each_then_comma(plain_strata) -%}
    {%- set test_of_sides = spellcurve._trend(
        'parts_of_spells', spellcurve._compared(caller_name, 'is_recent', plain_strata, [], []), none, weights, 0.95, 2
    ) -%}
    {%- set curves -%}
(
{{ spellcurve._without_provenance(spellcurve.survival_curve('parts_of_spells', by=['is_recent'], weights='fractional')) }}
) as curves_of_sides
    {%- endset -%}
    {%- set survival_of_sides = spellcurve._without_provenance(spellcurve.survival_at(curves, at, by=['is_recent'])) -%}
    {%- set figures = [
        'unplaced', 'spells_recent', 'spells_baseline', 'events_recent', 'events_baseline', 'survival_recent', 'survival_baseline', 'z',
        'statistic', 'p_value', 'hazard_ratio'
    ] -%}
with {% if compare == 'cohorts' -%}
parts_placed as (
    select
        {{ spellcurve._columns_as(strata, plain_strata) }}entry, duration, event, weight,
        case
            when started_at is null then -1
            when {{ spellcurve._is_before('started_at', cutoff_sql, o) }} then 0
            else 1
        end as is_recent
    from {{ model }}
    {%- if begin is not none %}
    where started_at is null or not {{ spellcurve._is_before('started_at', begin_sql, o) }}
    {%- endif %}
),

{% else -%}
-- a name that no query in here uses: some engines look names up where a CTE is read, not where it is written
sides_of_cutoff as (
    select 0 as side
    union all
    select 1 as side
),

-- tenure when the recent period began, and when the baseline did; -1 where the spell had not begun
spells_placed as (
    select
        {{ spellcurve._columns_as(strata, plain_strata) }}weight,
        entry as given_entry,
        duration as given_duration,
        event as given_event,
        {%- for name, moment in [('tenure_then', cutoff_sql), ('tenure_at_first', begin_sql)] %}
        case
            {%- if moment is none %}
            when started_at is null then null
            else -1
            {%- else %}
            when {{ spellcurve._is_before('started_at', moment, o) }} then {{ spellcurve._completed_units('started_at', moment, unit) }}
            when started_at is not null then -1
            {%- endif %}
        end as {{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from {{ model }}
),

-- a unit of tenure belongs to the period in which it was completed; who had completed none yet is recent from the start
parts_placed as (
    select
        {{ each_stratum }}weight,
        case when tenure_then is null then -1 else side end as is_recent,
        case when side = 1 then greatest(given_entry, tenure_then, 0) else greatest(given_entry, tenure_at_first, 0) end as entry,
        case when side = 1 then given_duration else least(given_duration, tenure_then) end as duration,
        case when side = 1 or given_duration <= tenure_then then given_event else 0 end as event
    from spells_placed
    cross join sides_of_cutoff
    where
        (tenure_then is null and side = 0)
        or (side = 1 and (tenure_then <= 0 or given_duration > tenure_then))
        or (
            side = 0 and tenure_then > 0 and given_entry < tenure_then
            and (tenure_at_first <= 0 or given_duration > tenure_at_first)
        )
),

{% endif -%}
parts_of_spells as (
    select
        is_recent, {{ each_stratum }}entry, duration, event,
        sum({{ spellcurve._double('weight') }}) as weight
    from parts_placed
    where is_recent >= 0 and (entry < duration or duration = 0)
    group by is_recent, {{ each_stratum }}entry, duration, event
),

unplaced_spells as (
    select count(*) as unplaced
    from parts_placed
    where is_recent = -1
),

tallies as (
    select
        {%- for side, name in [(1, 'recent'), (0, 'baseline')] %}
        sum(case when is_recent = {{ side }} then weight else 0 end) as spells_{{ name }},
        sum(case when is_recent = {{ side }} then weight * event else 0 end) as events_{{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from parts_of_spells
),

test_of_sides as (
{{ test_of_sides }}
),

survival_of_sides as (
{{ survival_of_sides }}
),

figures_found as (
    {{- spellcurve._figures_from(figures, 'unplaced_spells', {'unplaced': 'unplaced'}) }}
    union all
    {{- spellcurve._figures_from(figures, 'tallies', {
        'spells_recent': 'spells_recent', 'spells_baseline': 'spells_baseline', 'events_recent': 'events_recent',
        'events_baseline': 'events_baseline'
    }) }}
    union all
    {{- spellcurve._figures_from(figures, 'test_of_sides', {'z': 'z', 'statistic': 'statistic', 'p_value': 'p_value', 'hazard_ratio': 'hazard_ratio'}) }}
    union all
    {{- spellcurve._figures_from(figures, 'survival_of_sides', {
        'survival_recent': 'case when is_recent = 1 then survival end', 'survival_baseline': 'case when is_recent = 0 then survival end'
    }) }}
),

figures_together as (
    select
        {%- for name in figures %}
        max({{ name }}) as {{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from figures_found
),

verdicts as (
    select
        case
            when unplaced > 0
                then {{ dbt.concat([
                    spellcurve._as_text(spellcurve._integer('unplaced')),
                    spellcurve._text(' spells have no started_at, so that they belong to no period; give a spell table with dates.')
                ]) }}
            when not coalesce(spells_recent, 0) > 0
                then {{ spellcurve._text('Nobody was under observation since ' ~ since ~ ', so nothing can be compared.') }}
            when not coalesce(spells_baseline, 0) > 0
                then {{ spellcurve._text('Nobody was under observation' ~ from_words ~ ', so nothing can be compared.') }}
            when p_value < {{ spellcurve._double_literal(alpha) }}
                then {{ dbt.concat([
                    spellcurve._text('The event comes '), "case when z > 0 then 'sooner' else 'later' end",
                    spellcurve._text(
                        (' for spells begun' if compare == 'cohorts' else '') ~ ' since ' ~ since ~ ' than'
                        ~ (from_words if begin is not none or compare == 'cohorts' else ' before') ~ ': survival at ' ~ unit ~ ' ' ~ at ~ ' is '
                    ),
                    "case when survival_recent is null then 'not known yet' else " ~ spellcurve._percent('survival_recent') ~ ' end',
                    spellcurve._text(' and was '),
                    "case when survival_baseline is null then 'not known' else " ~ spellcurve._percent('survival_baseline') ~ ' end',
                    spellcurve._text(' (' ~ weights.shown ~ ', '), spellcurve._p_in_words('p_value'), spellcurve._text(').')
                ]) }}
        end as problem,
        survival_recent, survival_baseline, spells_recent, spells_baseline, events_recent, events_baseline, statistic, p_value, hazard_ratio
    from figures_together
)

select
    problem,
    {{ spellcurve._integer(at) }} as duration,
    survival_recent,
    survival_baseline,
    survival_recent - survival_baseline as difference,
    spells_recent, spells_baseline, events_recent, events_baseline, statistic, p_value, hazard_ratio
from verdicts
where problem is not null
{% endmacro %}
