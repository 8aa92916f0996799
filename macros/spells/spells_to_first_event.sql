{% macro spells_to_first_event(
    origins, events, subject, origin_at, event_at, cause=none, event_subject=none,
    as_of=none, observe_from=none, recorded_at=none, unit='day', carry=[], rows='sound', source_rows=false
) %}
    {%- do spellcurve._check_call(
        'spells_to_first_event',
        {'origins': origins, 'events': events, 'subject': subject, 'origin_at': origin_at, 'event_at': event_at},
        ['origins', 'events', 'subject', 'origin_at', 'event_at', 'cause', 'event_subject', 'as_of', 'observe_from', 'recorded_at',
         'unit', 'carry', 'rows', 'source_rows'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('spells_to_first_event', 'spellcurve')(
        origins, events, subject, origin_at, event_at, cause, event_subject, as_of, observe_from, recorded_at, unit, carry, rows,
        source_rows
    )) }}
{% endmacro %}


{% macro default__spells_to_first_event(
    origins, events, subject, origin_at, event_at, cause, event_subject, as_of, observe_from, recorded_at, unit, carry, rows, source_rows
) %}
    {%- set caller_name = 'spells_to_first_event' -%}
    {%- set o = spellcurve._observation(caller_name, as_of, observe_from, recorded_at, unit, carry, rows, source_rows) -%}
    {%- set event_subject = event_subject or subject -%}
    {%- for argument, name in {
        'subject': subject, 'origin_at': origin_at, 'event_at': event_at, 'cause': cause or subject, 'event_subject': event_subject
    }.items() -%}
        {%- do spellcurve._check_column(caller_name, argument, name) -%}
    {%- endfor -%}
    {%- set apart = spellcurve._apart_from_refused(o) -%}

    {%- set origin_faults = spellcurve._recording_faults(o) + [
        ['no_subject', 'subject_id is null', spellcurve._text(subject ~ ' is null')],
        ['no_start', 'raw_start is null', spellcurve._text(origin_at ~ ' is null')],
        ['unreadable_start', 'moment is null', spellcurve._detail(origin_at, 'raw_start', 'is not a date or a time')],
        [
            'starts_after_as_of', 'moment > ' ~ o.as_of_sql,
            spellcurve._detail(origin_at, 'raw_start', 'is after as_of ' ~ o.as_of)
        ]
    ] -%}
    {%- set event_faults = spellcurve._recording_faults(o) + [
        ['no_subject', 'subject_id is null', spellcurve._text(event_subject ~ ' is null')],
        ['no_time', 'raw_start is null', spellcurve._text(event_at ~ ' is null')],
        ['unreadable_time', 'moment is null', spellcurve._detail(event_at, 'raw_start', 'is not a date or a time')],
        ['after_as_of', 'moment > ' ~ o.as_of_sql, spellcurve._detail(event_at, 'raw_start', 'is after as_of ' ~ o.as_of)]
    ] -%}

    {%- set ctes -%}
origins_read as (
    select
        {{- spellcurve._recorded_columns(o) }}
        {{ spellcurve._column(subject) }} as subject_id,
        {{ spellcurve._column(origin_at) }} as raw_start,
        {{ spellcurve._read_moment(spellcurve._column(origin_at)) }} as moment
        {{- spellcurve._carried_from_source(o) }}
    from {{ origins }}
),

origins_judged as (
    select
        subject_id, moment, raw_start{{ spellcurve._carried(o) }},
        {{ spellcurve._first_fault(origin_faults, o) | indent(8) }}
    from origins_read
),

origins_counted as (
    select
        *,
        row_number() over (partition by subject_id{{ apart }}, moment order by raw_start) as copy_number
    from origins_judged
    {{ spellcurve._without_refused(o) }}
),

single_origins as (
    select
        subject_id, moment, raw_start{{ spellcurve._carried(o) }},
        {{ spellcurve._first_fault([
            ['duplicate_row', 'copy_number > 1', spellcurve._text('another row of this subject has the same ' ~ origin_at)]
        ], o, so_far=true) | indent(8) }}
    from origins_counted
),

events_read as (
    select
        {{- spellcurve._recorded_columns(o) }}
        {{ spellcurve._column(event_subject) }} as subject_id,
        {{ spellcurve._column(event_at) }} as raw_start,
        {{ spellcurve._read_moment(spellcurve._column(event_at)) }} as moment,
        {{ spellcurve._as_text(spellcurve._column(cause) if cause else 'null') }} as cause
    from {{ events }}
),

events_judged as (
    select
        subject_id, moment, raw_start, cause,
        {{ spellcurve._first_fault(event_faults, o) | indent(8) }}
    from events_read
),

timeline as (
    select
        subject_id, moment, 1 as is_origin, {{ spellcurve._as_text('null') }} as cause, fault,
        {%- if o.rows == 'faulty' %} detail, {% endif %}
        {{ spellcurve._as_text('raw_start') }} as raw_start{{ spellcurve._carried(o) }}
    from single_origins
    {{ spellcurve._without_refused(o) }}

    union all

    select
        subject_id, moment, 0 as is_origin, cause, fault,
        {%- if o.rows == 'faulty' %} detail, {% endif %}
        {{ spellcurve._as_text('raw_start') }} as raw_start
        {%- for alias in o.carried %}, null as {{ alias }}{% endfor %}
    from events_judged
    {{ spellcurve._without_refused(o) }}
),

-- counted from the last event backwards, an origin has the number of the first event at or after it; 0 where there is none
numbered_timeline as (
    select
        *,
        sum(is_origin) over (
            partition by subject_id{{ apart }} order by moment, is_origin desc rows between unbounded preceding and current row
        ) as spell_key,
        max(case when is_origin = 1 then moment end) over (
            partition by subject_id{{ apart }} order by moment, is_origin desc rows between unbounded preceding and current row
        ) as last_origin,
        sum(1 - is_origin) over (
            partition by subject_id{{ apart }} order by moment desc, is_origin, case when cause is null then 0 else 1 end, cause desc
            rows between unbounded preceding and current row
        ) as events_to_come
    from timeline
),

origins_with_events as (
    select
        *,
        max(case when is_origin = 0 then moment end) over (partition by subject_id{{ apart }}, events_to_come) as next_event,
        max(case when is_origin = 0 then cause end) over (partition by subject_id{{ apart }}, events_to_come) as next_cause
    from numbered_timeline
),

pieces as (
    select
        subject_id,
        spell_key,
        last_origin as started,
        case when is_origin = 1 then next_event else last_origin end as ended,
        case when is_origin = 1 then next_cause end as cause,
        1 - is_origin as supplement{{ spellcurve._carried(o) }}
        {%- if o.rows == 'faulty' %}, raw_start, null as raw_end, cause as raw_kind{% endif %},
        {{ spellcurve._first_fault([
            ['no_origin', 'spell_key = 0', spellcurve._detail(event_at, 'raw_start', 'has no origin of this subject at or before it')]
        ], o, so_far=true) | indent(8) }}
    from origins_with_events
)
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'origins': origins, 'events': events}, {
            'subject': subject, 'origin_at': origin_at, 'event_at': event_at, 'cause': cause, 'event_subject': event_subject,
            'as_of': o.as_of, 'observe_from': o.observe_from, 'recorded_at': recorded_at, 'unit': unit, 'carry': o.carry,
            'rows': rows, 'source_rows': source_rows
        }) ~ '\n' ~ spellcurve._spells_from_pieces(o, ctes, 'keyed', has_cause=cause is not none)
    ) }}
{% endmacro %}
