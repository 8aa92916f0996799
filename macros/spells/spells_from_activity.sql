{% macro spells_from_activity(
    relation, subject, happened, lapse_after, ends_at='silence',
    as_of=none, observe_from=none, recorded_at=none, unit='day', carry=[], rows='sound', source_rows=false
) %}
    {%- do spellcurve._check_call(
        'spells_from_activity',
        {'relation': relation, 'subject': subject, 'happened': happened, 'lapse_after': lapse_after},
        ['relation', 'subject', 'happened', 'lapse_after', 'ends_at', 'as_of', 'observe_from', 'recorded_at', 'unit', 'carry', 'rows',
         'source_rows'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('spells_from_activity', 'spellcurve')(
        relation, subject, happened, lapse_after, ends_at, as_of, observe_from, recorded_at, unit, carry, rows, source_rows
    )) }}
{% endmacro %}


{% macro default__spells_from_activity(
    relation, subject, happened, lapse_after, ends_at, as_of, observe_from, recorded_at, unit, carry, rows, source_rows
) %}
    {%- set caller_name = 'spells_from_activity' -%}
    {%- set o = spellcurve._observation(caller_name, as_of, observe_from, recorded_at, unit, carry, rows, source_rows) -%}
    {%- do spellcurve._check_whole(caller_name, 'lapse_after', lapse_after, 1) -%}
    {%- do spellcurve._check_choice(caller_name, 'ends_at', ends_at, ['silence', 'last_activity']) -%}
    {%- do spellcurve._check_column(caller_name, 'subject', subject) -%}
    {%- do spellcurve._check_column(caller_name, 'happened', happened) -%}

    {%- set faults = spellcurve._recording_faults(o) + [
        ['no_subject', 'subject_id is null', spellcurve._text(subject ~ ' is null')],
        ['no_time', 'raw_start is null', spellcurve._text(happened ~ ' is null')],
        ['unreadable_time', 'moment is null', spellcurve._detail(happened, 'raw_start', 'is not a date or a time')],
        ['after_as_of', 'moment > ' ~ o.as_of_sql, spellcurve._detail(happened, 'raw_start', 'is after as_of ' ~ o.as_of)]
    ] -%}

    {#- where days are counted, it is the beginning of a day that makes the silence long enough -#}
    {%- set counted_from = 'cast(' ~ spellcurve._date('moment') ~ ' as ' ~ spellcurve._moment_type() ~ ')' if o.by_day else 'moment' -%}
    {%- set lapse = spellcurve._moment_plus(counted_from, lapse_after, o.clock) -%}

    {%- set ctes -%}
source_rows_read as (
    select
        {{- spellcurve._recorded_columns(o) }}
        {{ spellcurve._column(subject) }} as subject_id,
        {{ spellcurve._column(happened) }} as raw_start,
        {{ spellcurve._read_moment(spellcurve._column(happened)) }} as moment
        {{- spellcurve._carried_from_source(o) }}
    from {{ relation }}
),

-- each activity covers the time until it would count as silence; spells are what these stretches cover together
pieces as (
    select
        subject_id,
        moment as started,
        {{ lapse if ends_at == 'silence' else 'moment' }} as ended,
        {{ spellcurve._as_text('null') }} as cause,
        0 as supplement{{ spellcurve._carried(o) }}
        {%- if o.rows == 'faulty' %}, raw_start, null as raw_end, null as raw_kind{% endif %},
        {{ spellcurve._first_fault(faults, o) | indent(8) }}
    from source_rows_read
)
    {%- endset -%}

    {%- set wait = 0 if ends_at == 'silence' else lapse_after -%}
    {{ return(
        spellcurve._provenance(caller_name, {'relation': relation}, {
            'subject': subject, 'happened': happened, 'lapse_after': lapse_after, 'ends_at': ends_at, 'as_of': o.as_of,
            'observe_from': o.observe_from, 'recorded_at': recorded_at, 'unit': unit, 'carry': o.carry, 'rows': rows,
            'source_rows': source_rows
        }) ~ '\n' ~ spellcurve._spells_from_pieces(o, ctes, 'near', reach=wait, inclusive=false, wait=wait)
    ) }}
{% endmacro %}
