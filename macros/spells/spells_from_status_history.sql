{% macro spells_from_status_history(
    relation, subject, effective, status, active, grace=0, ended=none, cause=none, sequence=none, shape='changes',
    as_of=none, observe_from=none, recorded_at=none, unit='day', carry=[], rows='sound', source_rows=false
) %}
    {%- do spellcurve._check_call(
        'spells_from_status_history',
        {'relation': relation, 'subject': subject, 'effective': effective, 'status': status, 'active': active},
        ['relation', 'subject', 'effective', 'status', 'active', 'grace', 'ended', 'cause', 'sequence', 'shape', 'as_of',
         'observe_from', 'recorded_at', 'unit', 'carry', 'rows', 'source_rows'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('spells_from_status_history', 'spellcurve')(
        relation, subject, effective, status, active, grace, ended, cause, sequence, shape, as_of, observe_from, recorded_at, unit,
        carry, rows, source_rows
    )) }}
{% endmacro %}


{% macro default__spells_from_status_history(
    relation, subject, effective, status, active, grace, ended, cause, sequence, shape, as_of, observe_from, recorded_at, unit, carry,
    rows, source_rows
) %}
    {%- set caller_name = 'spells_from_status_history' -%}
    {%- set o = spellcurve._observation(
        caller_name, as_of, observe_from, recorded_at, unit, carry, rows, source_rows, grace
    ) -%}
    {%- do spellcurve._check_choice(caller_name, 'shape', shape, ['changes', 'snapshots']) -%}
    {%- set by_snapshot = shape == 'snapshots' -%}
    {%- if by_snapshot and (ended is not none or sequence is not none or not o.by_day) -%}
        {%- do spellcurve._fail(
            caller_name,
            "shape is 'snapshots', which reads one status a day: leave ended and sequence out, and let unit be day, week or month."
        ) -%}
    {%- endif -%}
    {%- for argument, name in {
        'subject': subject, 'effective': effective, 'status': status, 'ended': ended or subject, 'cause': cause or subject,
        'sequence': sequence or subject
    }.items() -%}
        {%- do spellcurve._check_column(caller_name, argument, name) -%}
    {%- endfor -%}
    {%- set active_statuses = spellcurve._check_values(caller_name, 'active', active) -%}
    {%- set apart = spellcurve._apart_from_refused(o) -%}
    {%- set when_columns = 'moment, ' ~ ('sequence_value, ' if sequence else '') -%}
    {#- rows without a sequence come last, wherever the warehouse would put its nulls -#}
    {%- set in_order = 'moment, ' ~ ('case when sequence_value is null then 1 else 0 end, sequence_value, ' if sequence else '') -%}

    {%- set faults = spellcurve._recording_faults(o) + [
        ['no_subject', 'subject_id is null', spellcurve._text(subject ~ ' is null')],
        ['no_time', 'raw_start is null', spellcurve._text(effective ~ ' is null')],
        ['unreadable_time', 'moment is null', spellcurve._detail(effective, 'raw_start', 'is not a date or a time')],
        [
            'after_as_of', ('time_read' if by_snapshot else 'moment') ~ ' > ' ~ o.as_of_sql,
            spellcurve._detail(effective, 'raw_start', 'is after as_of ' ~ o.as_of)
        ],
        ['no_status', 'status is null', spellcurve._text(status ~ ' is null')]
    ] -%}
    {%- if ended is not none -%}
        {%- set faults = faults + [
            [
                'unreadable_end', 'raw_end is not null and own_end is null',
                spellcurve._detail(ended, 'raw_end', 'is not a date or a time')
            ],
            [
                'ends_before_start', spellcurve._is_before('own_end', 'moment', o),
                spellcurve._detail(ended, 'raw_end', 'is before ' ~ effective)
            ]
        ] -%}
    {%- endif -%}

    {%- set ctes -%}
source_rows_read as (
    select
        {{- spellcurve._recorded_columns(o) }}
        {{ spellcurve._column(subject) }} as subject_id,
        {{ spellcurve._column(effective) }} as raw_start,
        {%- if ended is not none %}
        {{ spellcurve._column(ended) }} as raw_end,
        {{ spellcurve._read_moment(spellcurve._column(ended)) }} as own_end,
        {%- endif %}
        {{ spellcurve._read_moment(spellcurve._column(effective)) }} as {{ 'time_read' if by_snapshot else 'moment' }},
        {%- if sequence %}
        {{ spellcurve._column(sequence) }} as sequence_value,
        {%- endif %}
        {{ spellcurve._as_text(spellcurve._column(status)) }} as status,
        {{ spellcurve._as_text(spellcurve._column(cause) if cause else 'null') }} as cause
        {{- spellcurve._carried_from_source(o) }}
    from {{ relation }}
),

{% if by_snapshot -%}
days_read as (
    select
        *,
        cast({{ spellcurve._date('time_read') }} as {{ spellcurve._moment_type() }}) as moment
    from source_rows_read
),

{% endif -%}
rows_judged as (
    select
        subject_id, {{ when_columns }}cause{{ spellcurve._carried(o) }}
        {%- if ended is not none %}, own_end{% endif %},
        case when status in ({{ spellcurve._texts(active_statuses) }}) then 1 else 0 end as is_active
        {%- if o.rows == 'faulty' %}, raw_start, {{ 'raw_end' if ended is not none else 'null as raw_end' }}, status as raw_kind{% endif %},
        {{ spellcurve._first_fault(faults, o) | indent(8) }}
    from {{ 'days_read' if by_snapshot else 'source_rows_read' }}
),

{% if by_snapshot -%}
snapshot_days as (
    select distinct moment as snapshot_day
    from rows_judged
    where fault is null
),

calendar as (
    select
        snapshot_day,
        lead(snapshot_day) over (order by snapshot_day) as next_day,
        max(snapshot_day) over () as last_day
    from snapshot_days
),

rows_on_calendar as (
    select
        rows_judged.*,
        calendar.next_day,
        calendar.last_day
    from rows_judged
    left join calendar on rows_judged.moment = calendar.snapshot_day
),

{% endif -%}
moments_compared as (
    select
        *,
        min(is_active) over (partition by subject_id{{ apart }}, {{ when_columns[:-2] }}) as least_active,
        max(is_active) over (partition by subject_id{{ apart }}, {{ when_columns[:-2] }}) as most_active,
        min(cause) over (partition by subject_id{{ apart }}, {{ when_columns[:-2] }}) as cause_of_moment
    from {{ 'rows_on_calendar' if by_snapshot else 'rows_judged' }}
    {{ spellcurve._without_refused(o) }}
),

{% set more = (['own_end'] if ended is not none else []) + (['next_day', 'last_day'] if by_snapshot else []) -%}
rows_agreed as (
    select
        subject_id, {{ when_columns }}cause_of_moment, is_active
        {%- for name in more %}, {{ name }}{% endfor %}{{ spellcurve._carried(o) }}
        {%- if o.rows == 'faulty' %}, raw_start, raw_end, raw_kind{% endif %},
        {{ spellcurve._first_fault([
            [
                'conflicting_status', 'least_active <> most_active',
                spellcurve._detail(effective, 'raw_start', 'has an active and an inactive status of this subject')
            ]
        ], o, so_far=true) | indent(8) }}
    from moments_compared
),

moments_counted as (
    select
        *,
        row_number() over (partition by subject_id{{ apart }}, {{ when_columns[:-2] }} order by cause_of_moment) as copy_number,
        count(*) over (partition by subject_id{{ apart }}, {{ when_columns[:-2] }}) as copies
    from rows_agreed
    {{ spellcurve._without_refused(o) }}
),

rows_in_order as (
    select
        *,
        row_number() over (partition by subject_id{{ apart }} order by {{ in_order }}copy_number) as place_in_order
    from moments_counted
),

rows_with_neighbours as (
    select
        *,
        lead(moment) over (partition by subject_id{{ apart }} order by place_in_order) as following_moment,
        lead(is_active) over (partition by subject_id{{ apart }} order by place_in_order) as following_is_active,
        lead(cause_of_moment) over (partition by subject_id{{ apart }} order by place_in_order) as following_cause,
        max(case when is_active = 1 then moment end) over (
            partition by subject_id{{ apart }} order by place_in_order rows between unbounded preceding and current row
        ) as last_active
    from rows_in_order
),

{% set this_moment = 'partition by subject_id' ~ apart ~ ', ' ~ when_columns[:-2] -%}
-- several rows of one moment all last until the next moment, which the last of them knows
rows_with_next_moment as (
    select
        *,
        max(case when copy_number = copies then following_moment end) over ({{ this_moment }}) as next_moment,
        max(case when copy_number = copies then following_is_active end) over ({{ this_moment }}) as next_is_active,
        max(case when copy_number = copies then following_cause end) over ({{ this_moment }}) as next_cause
    from rows_with_neighbours
),

pieces as (
    select
        subject_id,
        case when is_active = 1 then moment else last_active end as started,
        {% if by_snapshot -%}
        case when is_active = 1 then next_day else last_active end as ended,
        last_day,
        {%- elif ended is not none -%}
        case when is_active = 1 then coalesce(own_end, next_moment) else last_active end as ended,
        {%- else -%}
        case when is_active = 1 then next_moment else last_active end as ended,
        {%- endif %}
        case when is_active = 1 and next_is_active = 0 then next_cause end as cause,
        1 - is_active as supplement{{ spellcurve._carried(o) }}
        {%- if o.rows == 'faulty' %}, raw_start, raw_end, raw_kind{% endif %},
        {{ spellcurve._first_fault([
            ['nothing_open', 'last_active is null', spellcurve._detail(status, 'raw_kind', 'comes before any active status of this subject')]
        ], o, so_far=true) | indent(8) }}
    from rows_with_next_moment
)
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'relation': relation}, {
            'subject': subject, 'effective': effective, 'status': status, 'active': active_statuses, 'grace': grace, 'ended': ended,
            'cause': cause, 'sequence': sequence, 'shape': shape, 'as_of': o.as_of, 'observe_from': o.observe_from,
            'recorded_at': recorded_at, 'unit': unit, 'carry': o.carry, 'rows': rows, 'source_rows': source_rows
        }) ~ '\n' ~ spellcurve._spells_from_pieces(
            o, ctes, 'near', reach=grace, wait=grace, last_known='last_day' if by_snapshot else none, has_cause=cause is not none
        )
    ) }}
{% endmacro %}
