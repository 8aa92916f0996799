{% macro mean_cumulative_count(
    spells, events, subject, happened, by=[], confidence=0.95, interval_scale='log', horizon=none, grid='steps', minimum_at_risk=0,
    small_counts='keep', weights='whole', unit='day', happened_as='moment', variance='robust', rows='sound'
) %}
    {%- do spellcurve._check_call(
        'mean_cumulative_count',
        {'spells': spells, 'events': events, 'subject': subject, 'happened': happened},
        ['spells', 'events', 'subject', 'happened', 'by', 'confidence', 'interval_scale', 'horizon', 'grid', 'minimum_at_risk',
         'small_counts', 'weights', 'unit', 'happened_as', 'variance', 'rows'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('mean_cumulative_count', 'spellcurve')(
        spells, events, subject, happened, by, confidence, interval_scale, horizon, grid, minimum_at_risk, small_counts, weights, unit,
        happened_as, variance, rows
    )) }}
{% endmacro %}


{% macro _mean_cumulative_count_columns() %}
    {{ return(['duration', 'at_risk', 'events', 'mean_count', 'std_error', 'mean_count_lower', 'mean_count_upper']) }}
{% endmacro %}


{% macro default__mean_cumulative_count(
    spells, events, subject, happened, by, confidence, interval_scale, horizon, grid, minimum_at_risk, small_counts, weights, unit,
    happened_as, variance, rows
) %}
    {%- set caller_name = 'mean_cumulative_count' -%}
    {%- set by = spellcurve._check_columns(caller_name, 'by', by, spellcurve._mean_cumulative_count_columns()) -%}
    {%- do spellcurve._check_column(caller_name, 'subject', subject) -%}
    {%- do spellcurve._check_column(caller_name, 'happened', happened) -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {%- do spellcurve._check_choice(caller_name, 'interval_scale', interval_scale, ['log', 'linear']) -%}
    {%- do spellcurve._check_rows_wanted(caller_name, grid, horizon, minimum_at_risk, small_counts) -%}
    {%- do spellcurve._check_choice(caller_name, 'weights', weights, ['whole', 'fractional']) -%}
    {%- do spellcurve._check_choice(caller_name, 'happened_as', happened_as, ['moment', 'tenure']) -%}
    {%- do spellcurve._check_choice(caller_name, 'variance', variance, ['robust', 'poisson']) -%}
    {%- do spellcurve._check_choice(caller_name, 'rows', rows, ['sound', 'faulty']) -%}
    {%- do spellcurve._check_choice(caller_name, 'unit', unit, ['day', 'week', 'month', 'hour', 'minute']) -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set provenance = spellcurve._provenance(caller_name, {'spells': spells, 'events': events}, {
        'subject': subject, 'happened': happened, 'by': by, 'confidence': confidence, 'interval_scale': interval_scale,
        'horizon': horizon, 'grid': grid, 'minimum_at_risk': minimum_at_risk, 'small_counts': small_counts, 'weights': weights,
        'unit': unit, 'happened_as': happened_as, 'variance': variance, 'rows': rows
    }) -%}
    {%- set ctes = spellcurve._counted_events(spells, events, subject, happened, by, unit, happened_as, rows) -%}

    {%- if rows == 'faulty' -%}
        {%- set body -%}
with {{ ctes }}

select
    subject_id,
    {{ spellcurve._as_text('raw_time') }} as given_time,
    fault,
    detail
from rows_judged
where is_spell = 0 and fault is not null
        {%- endset -%}
        {{ return(provenance ~ '\n' ~ body) }}
    {%- endif -%}

    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
    {%- set so_far = partition ~ 'order by duration rows between unbounded preceding and current row' -%}
    {%- set z = spellcurve._normal_quantile(0.5 + confidence / 2) -%}
    {%- set forth = spellcurve._double_literal(z) -%}
    {%- set estimates = ['mean_count', 'std_error', 'mean_count_lower', 'mean_count_upper'] -%}
    {%- set body -%}
with {{ ctes }},

{{ spellcurve._count_risk_sets(groups) }},

{{ spellcurve._count_variances(groups) }},

figures as (
    select
        {{ each_group }}duration, at_risk, events, is_step, next_at_risk, next_duration, mean_count,
        {% if variance == 'poisson' -%}
        sqrt(naive_variance)
        {%- else -%}
        -- what rounding alone leaves is no variance
        sqrt(case
            when robust_variance > 1e-13 * size_of_terms and robust_variance > 1e-22 * mean_count * naive_variance then robust_variance
            else 0
        end)
        {%- endif %} as root_of_variance
    from variances
),

figures_with_bounds as (
    select
        {{ each_group }}duration, at_risk, events, is_step, next_at_risk, next_duration, mean_count,
        case when mean_count = 0 then 0 when root_of_variance > 0 then root_of_variance end as std_error,
        case
            when mean_count = 0 then 0
            when root_of_variance > 0 then
                {%- if interval_scale == 'log' %} mean_count / {{ spellcurve._exp(forth ~ ' * root_of_variance / mean_count') }}
                {%- else %} greatest(0, mean_count - {{ forth }} * root_of_variance)
                {%- endif %}
        end as mean_count_lower,
        case
            when mean_count = 0 then 0
            when root_of_variance > 0 then
                {%- if interval_scale == 'log' %} mean_count * {{ spellcurve._exp(forth ~ ' * root_of_variance / mean_count') }}
                {%- else %} mean_count + {{ forth }} * root_of_variance
                {%- endif %}
        end as mean_count_upper
    from figures
),

{% if grid == 'steps' -%}
rows_wanted as (
    select
        {{ each_group }}duration, at_risk, events, {{ estimates | join(', ') }}
    from figures_with_bounds
    where is_step = 1{% if horizon is not none %} and duration <= {{ horizon }}{% endif %}
)
{%- else -%}
{{ spellcurve._repeated_rows('units', 'figures_with_bounds', 'coalesce(next_duration, duration + 1) - duration') }},

rows_wanted as (
    select
        {{ each_group }}duration + units_on as duration,
        case when units_on = 0 then at_risk else next_at_risk end as at_risk,
        case when units_on = 0 then events else 0 end as events,
        {{ estimates | join(', ') }}
    from units
    {%- if horizon is not none %}
    where duration + units_on <= {{ horizon }}
    {%- endif %}
)
{%- endif %}

select
    {{ spellcurve._aliases_as(groups, by) }}{{ spellcurve._integer('duration') }} as duration,
    {{ spellcurve._published_columns(['at_risk', 'events'], estimates, minimum_at_risk, small_counts, weights) }}
from rows_wanted
    {%- endset -%}
    {{ return(provenance ~ '\n' ~ body) }}
{% endmacro %}


{#
    The CTEs that end with `rows_judged`: every spell, and every event with the tenure of its spell when it happened, or with the fault for
    which it counts nowhere. An event belongs to the spell of its subject that started last at or before it.
#}
{% macro _counted_events(spells, events, subject, happened, by, unit, happened_as, rows) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set by_moment = happened_as == 'moment' -%}
    {%- set o = {'rows': rows, 'by_day': unit in ('day', 'week', 'month'), 'unit': unit} -%}
    {%- set apart = spellcurve._apart_from_refused(o) -%}
    {%- set event_column = spellcurve._column(happened) -%}
    {%- set carried = groups + ['started', 'last_seen', 'entry', 'duration', 'weight'] if by_moment
        else groups + ['entry', 'duration', 'weight'] -%}
    {%- set first_faults = [
        ['no_subject', 'subject_id is null', spellcurve._text(subject ~ ' is null')],
        ['no_time', 'raw_time is null', spellcurve._text(happened ~ ' is null')],
        [
            'unreadable_time', 'reading is null' if by_moment else 'reading is null or reading < 0 or floor(reading) <> reading',
            spellcurve._detail(happened, 'raw_time', 'is not a date or a time' if by_moment else 'is not a whole number of at least 0')
        ]
    ] -%}
    {%- set no_spell = ['no_spell', 'spell_key = 0' ~ (' or event_moment > last_seen' if by_moment else '') ~ ' or tenure > duration',
        spellcurve._detail(happened, 'raw_time', 'is in no spell of this subject')] -%}
    {%- set last_faults = ([] if by_moment else [[
        'several_spells', 'spell_key > 1',
        spellcurve._text('the subject has several spells, and a tenure does not tell which')
    ]]) + [no_spell] + [[
        'before_observation', 'tenure <= entry and entry > 0',
        spellcurve._detail(happened, 'raw_time', 'is before observation of the spell began')
    ]] -%}
events_read as (
    select
        {{ spellcurve._column(subject) }} as subject_id,
        {{ event_column }} as raw_time,
        {{ spellcurve._read_moment(event_column) if by_moment else spellcurve._read_number(event_column) }} as reading
    from {{ events }}
),

events_judged as (
    select
        subject_id, raw_time, reading,
        {{ spellcurve._first_fault(first_faults, o) | indent(8) }}
    from events_read
),

timeline as (
    select
        {{ spellcurve._columns_as(by, groups) }}subject_id, 1 as is_spell,
        {%- if by_moment %}
        cast(started_at as {{ spellcurve._moment_type() }}) as event_moment,
        cast(started_at as {{ spellcurve._moment_type() }}) as started,
        cast(last_seen_at as {{ spellcurve._moment_type() }}) as last_seen,
        {%- else %}
        {{ spellcurve._double('entry') }} as reading,
        {%- endif %}
        entry, duration,
        {{ spellcurve._double('weight') }} as weight,
        {{ spellcurve._as_text('null') }} as raw_time,
        {{ spellcurve._as_text('null') }} as fault
        {%- if rows == 'faulty' %},
        {{ spellcurve._as_text('null') }} as detail
        {%- endif %}
    from {{ spells }}

    union all

    select
        {% for group in groups %}null as {{ group }}, {% endfor %}subject_id, 0 as is_spell,
        {%- if by_moment %}
        {{ 'cast(' ~ spellcurve._date('reading') ~ ' as ' ~ spellcurve._moment_type() ~ ')' if o.by_day else 'reading' }} as event_moment,
        null as started, null as last_seen,
        {%- else %}
        reading,
        {%- endif %}
        null as entry, null as duration, null as weight,
        {{ spellcurve._as_text('raw_time') }} as raw_time,
        fault
        {%- if rows == 'faulty' %}, detail{% endif %}
    from events_judged
    {{ spellcurve._without_refused(o) }}
),

{% set in_order = ('event_moment, is_spell desc, last_seen' if by_moment else 'is_spell desc, entry') ~ ', duration' -%}
timeline_by_spell as (
    select
        {{ (carried + ['subject_id', 'is_spell', 'event_moment' if by_moment else 'reading', 'raw_time', 'fault']) | join(', ') }}
        {%- if rows == 'faulty' %}, detail{% endif %},
        sum(is_spell) over (
            partition by subject_id{{ apart }} order by {{ in_order }} rows between unbounded preceding and current row
        ) as spell_key
    from timeline
),

rows_with_spell as (
    select
        subject_id, is_spell, spell_key, {{ 'event_moment' if by_moment else 'reading' }}, raw_time, fault
        {%- if rows == 'faulty' %}, detail{% endif %}
        {%- for name in carried %},
        first_value({{ name }}) over (
            partition by subject_id{{ apart }}, spell_key order by is_spell desc rows between unbounded preceding and current row
        ) as {{ name }}
        {%- endfor %}
    from timeline_by_spell
),

rows_with_tenure as (
    select
        {{ (carried + ['subject_id', 'is_spell', 'spell_key', 'raw_time', 'fault']) | join(', ') }}
        {%- if by_moment %}, event_moment{% endif %}
        {%- if rows == 'faulty' %}, detail{% endif %},
        {{ spellcurve._completed_units('started', 'event_moment', unit) if by_moment else spellcurve._integer('reading') }} as tenure
    from rows_with_spell
),

{% set own_faults = [] -%}
{%- for code, condition, detail in last_faults -%}
    {%- do own_faults.append([code, 'is_spell = 0 and (' ~ condition ~ ')', detail]) -%}
{%- endfor -%}
rows_judged as (
    select
        {{ (groups + ['subject_id', 'is_spell', 'spell_key', 'raw_time', 'tenure', 'entry', 'duration', 'weight']) | join(', ') }},
        {{ spellcurve._first_fault(own_faults, o, so_far=true) | indent(8) }}
    from rows_with_tenure
)
{%- endmacro %}


{#
    From `rows_judged` to `counts_with_sums`: one row a group, subject and duration at which something changes for the subject, each with the
    number at risk then (n), the mean count M = sum of d/n and, without the step d/n^2 of the duration itself, the naive variance L = sum of d/n^2.
    A subject's spells run on one clock.
#}
{% macro _count_risk_sets(groups) %}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
    {%- set at_duration = spellcurve._partition_by(groups + ['duration']) -%}
    {%- set subject_key = each_group ~ 'subject_id, unit_number, weight' -%}
{{ spellcurve._whole_numbers('sides', 'side', 1, 3) }},

-- an event (1), or a spell as it ends (1), enters late (2) and starts (3)
turns as (
    select
        {{ each_group }}subject_id,
        -- spells without a subject are a subject each
        case when subject_id is null then spell_key else 0 end as unit_number,
        weight,
        case when is_spell = 0 then tenure when side = 1 then duration when side = 2 then entry else 0 end as duration,
        1 - is_spell as happened,
        case when is_spell = 1 and side = 1 then 1 else 0 end as leaving,
        case when is_spell = 1 and side = 2 then 1 else 0 end as joining,
        case when is_spell = 1 and side = 3 and entry = 0 then 1 else 0 end as starting,
        case when is_spell = 1 and side = 2 then 0 else 1 end as is_step
    from rows_judged
    cross join sides
    where
        fault is null
        and (
            (is_spell = 0 and side = 1)
            or (is_spell = 1 and side = 3)
            or (is_spell = 1 and side = 1 and (entry < duration or entry = 0))
            or (is_spell = 1 and side = 2 and entry > 0 and entry < duration)
        )
),

changes as (
    select
        {{ subject_key }}, duration,
        sum(happened) as happened,
        sum(leaving) as leaving,
        sum(joining) as joining,
        sum(starting) as starting,
        max(is_step) as is_step
    from turns
    group by {{ subject_key }}, duration
),

counts as (
    select
        {{ subject_key }}, duration, happened, leaving, joining, starting,
        max(is_step) over ({{ at_duration | trim }}) as is_step,
        sum(weight * happened) over ({{ at_duration | trim }}) as events,
        sum(weight * (leaving + joining)) over ({{ partition | trim }}) as all_turns,
        sum(weight * (leaving - joining)) over (
            {{ partition }}order by duration desc range between unbounded preceding and current row
        ) as net_leaving,
        row_number() over ({{ at_duration }}order by happened) as place
    from changes
),

counts_at_risk as (
    select
        {{ subject_key }}, duration, happened, leaving, joining, starting, is_step, events, place,
        case when net_leaving > 1e-12 * all_turns then net_leaving else 0 end as at_risk
    from counts
),

count_steps as (
    select
        {{ subject_key }}, duration, happened, leaving, joining, starting, is_step, events, at_risk, place,
        case when at_risk > 0 then events / at_risk / at_risk else 0 end as naive_step,
        case when place = 1 and at_risk > 0 then events / at_risk else 0 end as mean_step
    from counts_at_risk
),

{% set so_far = partition ~ 'order by duration range between unbounded preceding and current row' -%}
{%- set before = partition ~ 'order by duration, place desc rows between unbounded preceding and 1 preceding' -%}
counts_with_sums as (
    select
        {{ subject_key }}, duration, happened, leaving, joining, starting, is_step, events, at_risk, naive_step,
        sum(mean_step) over ({{ so_far }}) as mean_count,
        -- of the rows of a duration the last brings its step, so that none counts it as before itself
        coalesce(sum(case when place = 1 then naive_step else 0 end) over ({{ before }}), 0) as naive_before
    from count_steps
)
{%- endmacro %}


{#
    From `counts_with_sums` to `variances`. A subject's score is the sum of its steps (e - r d/n) / n, with e its events and r its spells at risk;
    the variance of Lawless and Nadeau is the sum over subjects of squared scores. Between the changes of a subject (its events, and where its
    spells begin and end) each step is -r d/n^2, so that its score falls by r times what L rises by. The sum of squares is kept up to date
    duration by duration: the subjects that change are taken one by one, all others together, by their sums of r^2 and of r times score. So
    no subject is laid out over all durations, and scores are small where subjects hardly differ, which keeps the digits of their squares.
#}
{% macro _count_variances(groups) %}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
    {%- set so_far = partition ~ 'order by duration rows between unbounded preceding and current row' -%}
    {%- set before = partition ~ 'order by duration rows between unbounded preceding and 1 preceding' -%}
    {%- set of_subject = spellcurve._partition_by(groups + ['subject_id', 'unit_number', 'weight']) -%}
    {%- set subject_so_far = of_subject ~ 'order by duration rows between unbounded preceding and current row' -%}
    {%- set subject_before = of_subject ~ 'order by duration rows between unbounded preceding and 1 preceding' -%}
    {%- set of_duration = 'is_step, events, at_risk, mean_count, naive_step, naive_before' -%}
subject_risks as (
    select
        {{ each_group }}subject_id, unit_number, weight, duration, happened, leaving, joining, {{ of_duration }},
        sum(starting + joining - leaving) over ({{ subject_so_far }}) as r_after,
        lag(naive_before + naive_step) over ({{ of_subject }}order by duration) as last_naive
    from counts_with_sums
),

subject_turns as (
    select
        {{ each_group }}subject_id, unit_number, weight, duration, happened, {{ of_duration }}, last_naive, r_after,
        r_after - joining + leaving as r_here,
        coalesce(lag(r_after) over ({{ of_subject }}order by duration), 0) as r_before
    from subject_risks
),

subject_steps as (
    select
        {{ each_group }}subject_id, unit_number, weight, duration, {{ of_duration }}, r_before, r_after,
        case when r_before = 0 then 0 else 0 - r_before * (naive_before - last_naive) end as drift,
        case when at_risk > 0 then (happened * at_risk - r_here * events) / at_risk / at_risk else 0 end as step
    from subject_turns
),

subject_scores as (
    select
        {{ each_group }}weight, duration, {{ of_duration }}, r_before, r_after, step,
        drift + coalesce(sum(drift + step) over ({{ subject_before }}), 0) as score
    from subject_steps
),

duration_sums as (
    select
        {{ each_group }}duration,
        {%- for name in of_duration.split(', ') %}
        max({{ name }}) as {{ name }},
        {%- endfor %}
        sum(weight * step * (2 * score + step)) as own_squares,
        sum(weight * abs(step * (2 * score + step))) as own_turnover,
        sum(weight * r_before * score) as own_rs,
        sum(weight * (r_after * (score + step) - r_before * score)) as rs_step,
        sum(weight * r_before * r_before) as own_rr,
        sum(weight * (r_after * r_after - r_before * r_before)) as rr_step
    from subject_scores
    group by {{ each_group }}duration
),

others_at_risk as (
    select
        {{ each_group }}duration, {{ of_duration }}, own_squares, own_turnover, own_rs, rs_step,
        coalesce(sum(rr_step) over ({{ before }}), 0) - own_rr as others_rr
    from duration_sums
),

others_scores as (
    select
        {{ each_group }}duration, {{ of_duration }}, own_squares, own_turnover, others_rr,
        coalesce(sum(rs_step - naive_step * others_rr) over ({{ before }}), 0) - own_rs as others_rs
    from others_at_risk
),

square_steps as (
    select
        {{ each_group }}duration, {{ of_duration }},
        own_squares + naive_step * (naive_step * others_rr - 2 * others_rs) as square_step,
        own_turnover + naive_step * (naive_step * others_rr + 2 * abs(others_rs)) as turnover
    from others_scores
),

variances as (
    select
        {{ each_group }}duration, is_step, events, at_risk, mean_count,
        naive_before + naive_step as naive_variance,
        lead(at_risk) over ({{ partition }}order by duration) as next_at_risk,
        lead(duration) over ({{ partition }}order by duration) as next_duration,
        sum(square_step) over ({{ so_far }}) as robust_variance,
        sum(turnover) over ({{ so_far }}) as size_of_terms
    from square_steps
)
{%- endmacro %}
