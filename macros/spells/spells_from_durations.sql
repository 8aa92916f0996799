{% macro spells_from_durations(
    relation, duration, event, subject=none, entry=none, cause=none, weight=none, carry=[], rows='sound', unit='day',
    source_rows=false
) %}
    {%- for name in ('as_of', 'observe_from', 'recorded_at') if kwargs is defined and name in kwargs -%}
        {%- do spellcurve._fail(
            'spells_from_durations', name ~ ' has no meaning for durations without dates; leave it out, and give entry for late entry.'
        ) -%}
    {%- endfor -%}
    {%- do spellcurve._check_call(
        'spells_from_durations',
        {'relation': relation, 'duration': duration, 'event': event},
        ['relation', 'duration', 'event', 'subject', 'entry', 'cause', 'weight', 'carry', 'rows', 'unit', 'source_rows'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('spells_from_durations', 'spellcurve')(
        relation, duration, event, subject, entry, cause, weight, carry, rows, unit, source_rows
    )) }}
{% endmacro %}


{% macro default__spells_from_durations(
    relation, duration, event, subject, entry, cause, weight, carry, rows, unit, source_rows
) %}
    {%- set caller_name = 'spells_from_durations' -%}
    {%- set o = spellcurve._observation(caller_name, none, none, none, unit, carry, rows, source_rows) -%}
    {%- for argument, name in {
        'duration': duration, 'event': event, 'subject': subject or event, 'entry': entry or event, 'cause': cause or event,
        'weight': weight or event
    }.items() -%}
        {%- do spellcurve._check_column(caller_name, argument, name) -%}
    {%- endfor -%}

    {%- set faults = [] -%}
    {%- if subject -%}
        {%- do faults.append(['no_subject', 'subject_id is null', spellcurve._text(subject ~ ' is null')]) -%}
    {%- endif -%}
    {%- do faults.extend([
        ['no_duration', 'raw_end is null', spellcurve._text(duration ~ ' is null')],
        ['unreadable_duration', 'duration_read is null', spellcurve._detail(duration, 'raw_end', 'is not a number')],
        ['negative_duration', 'duration_read < 0', spellcurve._detail(duration, 'raw_end', 'is negative')],
        [
            'duration_not_whole', 'floor(duration_read) <> duration_read',
            spellcurve._detail(duration, 'raw_end', 'is not whole: round down, or count in a smaller unit')
        ],
        ['no_event', 'raw_kind is null', spellcurve._text(event ~ ' is null')],
        ['unreadable_event', 'event_read is null', spellcurve._detail(event, 'raw_kind', 'is neither 0 or false nor 1 or true')]
    ]) -%}
    {%- if entry -%}
        {%- do faults.extend([
            ['unreadable_entry', 'raw_start is not null and entry_read is null', spellcurve._detail(entry, 'raw_start', 'is not a number')],
            ['negative_entry', 'entry_read < 0', spellcurve._detail(entry, 'raw_start', 'is negative')],
            [
                'entry_not_whole', 'floor(entry_read) <> entry_read',
                spellcurve._detail(entry, 'raw_start', 'is not whole: round down, or count in a smaller unit')
            ],
            ['entry_after_duration', 'entry_read > duration_read', spellcurve._detail(entry, 'raw_start', 'is beyond ' ~ duration)]
        ]) -%}
    {%- endif -%}
    {%- if weight -%}
        {%- do faults.extend([
            ['no_weight', 'raw_weight is null', spellcurve._text(weight ~ ' is null')],
            ['unreadable_weight', 'weight_read is null', spellcurve._detail(weight, 'raw_weight', 'is not a number')],
            ['weight_not_positive', 'weight_read <= 0', spellcurve._detail(weight, 'raw_weight', 'is not above 0')]
        ]) -%}
    {%- endif -%}

    {%- set event_text = 'lower(trim(' ~ spellcurve._as_text(spellcurve._column(event)) ~ '))' -%}
    {%- set body -%}
with source_rows_read as (
    select
        {{ spellcurve._column(subject) if subject else spellcurve._as_text('null') }} as subject_id,
        {{ spellcurve._column(entry) if entry else 'null' }} as raw_start,
        {{ spellcurve._column(duration) }} as raw_end,
        {{ spellcurve._column(event) }} as raw_kind,
        {{ spellcurve._read_number(spellcurve._column(duration)) }} as duration_read,
        {{ spellcurve._read_number(spellcurve._column(entry)) if entry else '0' }} as entry_read,
        case
            when {{ event_text }} in ('1', '1.0', 'true', 't') then 1
            when {{ event_text }} in ('0', '0.0', 'false', 'f') then 0
        end as event_read,
        {%- if weight %}
        {{ spellcurve._column(weight) }} as raw_weight,
        {{ spellcurve._read_number(spellcurve._column(weight)) }} as weight_read,
        {%- endif %}
        coalesce({{ spellcurve._as_text(spellcurve._column(cause) if cause else 'null') }}, '{{ 'unknown' if cause else 'event' }}')
            as cause
        {{- spellcurve._carried_from_source(o) }}
    from {{ relation }}
),

rows_judged as (
    select
        subject_id, duration_read, entry_read, event_read, cause{{ spellcurve._carried(o) }}
        {%- if weight %}, weight_read{% endif %}
        {%- if o.rows == 'faulty' %}, raw_start, raw_end, raw_kind{% endif %},
        {{ spellcurve._first_fault(faults, o) | indent(8) }}
    from source_rows_read
)

{% if o.rows == 'faulty' -%}
select
    subject_id,
    {{ spellcurve._as_text('raw_start') }} as given_start,
    {{ spellcurve._as_text('raw_end') }} as given_end,
    {{ spellcurve._as_text('raw_kind') }} as given_kind,
    fault,
    detail
    {{- spellcurve._carried_to_result(o) }}
from rows_judged
where fault is not null
{%- else -%}
{%- set entry_read = 'coalesce(entry_read, 0)' if entry else '0' -%}
select
    subject_id,
    {{ spellcurve._integer(
        'row_number() over (partition by subject_id order by ' ~ entry_read ~ ', duration_read)' if subject else '1'
    ) }} as spell_number,
    {{ spellcurve._date('null') if o.by_day else 'cast(null as ' ~ spellcurve._moment_type() ~ ')' }} as started_at,
    {{ spellcurve._date('null') if o.by_day else 'cast(null as ' ~ spellcurve._moment_type() ~ ')' }} as last_seen_at,
    {{ spellcurve._integer(entry_read) }} as entry,
    {{ spellcurve._integer('duration_read') }} as duration,
    {{ spellcurve._integer('event_read') }} as event,
    case when event_read = 1 then cause end as cause,
    {{ 'weight_read' if weight else spellcurve._integer('1') }} as weight
    {%- if o.source_rows %},
    {{ spellcurve._integer('1') }} as source_rows
    {%- endif %}
    {{- spellcurve._carried_to_result(o) }}
from rows_judged
where fault is null
{%- endif -%}
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'relation': relation}, {
            'duration': duration, 'event': event, 'subject': subject, 'entry': entry, 'cause': cause, 'weight': weight,
            'carry': o.carry, 'rows': rows, 'unit': unit, 'source_rows': source_rows
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
