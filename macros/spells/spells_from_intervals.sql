{% macro spells_from_intervals(
    relation, subject, started, ended, cause=none, grace=0, overlaps='merge',
    as_of=none, observe_from=none, recorded_at=none, unit='day', carry=[], rows='sound', source_rows=false
) %}
    {%- do spellcurve._check_call(
        'spells_from_intervals',
        {'relation': relation, 'subject': subject, 'started': started, 'ended': ended},
        ['relation', 'subject', 'started', 'ended', 'cause', 'grace', 'overlaps', 'as_of', 'observe_from', 'recorded_at', 'unit',
         'carry', 'rows', 'source_rows'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('spells_from_intervals', 'spellcurve')(
        relation, subject, started, ended, cause, grace, overlaps, as_of, observe_from, recorded_at, unit, carry, rows, source_rows
    )) }}
{% endmacro %}


{% macro default__spells_from_intervals(
    relation, subject, started, ended, cause, grace, overlaps, as_of, observe_from, recorded_at, unit, carry, rows, source_rows
) %}
    {%- set caller_name = 'spells_from_intervals' -%}
    {%- set o = spellcurve._observation(
        caller_name, as_of, observe_from, recorded_at, unit, carry, rows, source_rows, grace
    ) -%}
    {%- do spellcurve._check_choice(caller_name, 'overlaps', overlaps, ['merge', 'refuse', 'keep']) -%}
    {%- if grace > 0 and overlaps != 'merge' -%}
        {%- do spellcurve._fail(
            caller_name, 'grace is ' ~ grace ~ " but overlaps is '" ~ overlaps ~ "'; a gap can only be bridged with overlaps='merge'."
        ) -%}
    {%- endif -%}
    {%- for argument, name in {'subject': subject, 'started': started, 'ended': ended, 'cause': cause or subject}.items() -%}
        {%- do spellcurve._check_column(caller_name, argument, name) -%}
    {%- endfor -%}

    {%- set faults = spellcurve._recording_faults(o) + [
        ['no_subject', 'subject_id is null', spellcurve._text(subject ~ ' is null')],
        ['no_start', 'raw_start is null', spellcurve._text(started ~ ' is null')],
        ['unreadable_start', 'started is null', spellcurve._detail(started, 'raw_start', 'is not a date or a time')],
        [
            'starts_after_as_of', 'started > ' ~ o.as_of_sql,
            spellcurve._detail(started, 'raw_start', 'is after as_of ' ~ o.as_of)
        ],
        [
            'unreadable_end', 'raw_end is not null and ended is null',
            spellcurve._detail(ended, 'raw_end', 'is not a date or a time')
        ],
        [
            'ends_before_start', spellcurve._is_before('ended', 'started', o),
            spellcurve._detail(ended, 'raw_end', 'is before the start')
        ]
    ] -%}

    {%- set ctes -%}
source_rows_read as (
    select
        {{- spellcurve._recorded_columns(o) }}
        {{ spellcurve._column(subject) }} as subject_id,
        {{ spellcurve._column(started) }} as raw_start,
        {{ spellcurve._column(ended) }} as raw_end,
        {{ spellcurve._column(cause) if cause else 'null' }} as raw_kind,
        {{ spellcurve._read_moment(spellcurve._column(started)) }} as started,
        {{ spellcurve._read_moment(spellcurve._column(ended)) }} as ended,
        {{ spellcurve._as_text(spellcurve._column(cause) if cause else 'null') }} as cause
        {{- spellcurve._carried_from_source(o) }}
    from {{ relation }}
),

{% if overlaps == 'refuse' -%}
rows_judged as (
    select
        subject_id, started, ended, cause{{ spellcurve._carried(o) }}
        {%- if o.rows == 'faulty' %}, raw_start, raw_end, raw_kind{% endif %},
        {{ spellcurve._first_fault(faults, o) | indent(8) }}
    from source_rows_read
),

{% set apart = spellcurve._apart_from_refused(o) -%}
{%- set never = spellcurve._never() -%}
{%- set ended_or_never = 'case when ended > ' ~ o.as_of_sql ~ ' then ' ~ never ~ ' else coalesce(ended, ' ~ never ~ ') end' -%}
rows_in_order as (
    select
        *,
        row_number() over (
            partition by subject_id{{ apart }} order by started, {{ ended_or_never }}, cause, ended
        ) as place_in_order,
        row_number() over (
            partition by subject_id{{ apart }}, started, {{ ended_or_never }} order by cause, ended
        ) as copy_number
    from rows_judged
    {{ spellcurve._without_refused(o) }}
),

rows_with_reach as (
    select
        *,
        max({{ ended_or_never }}) over (
            partition by subject_id{{ apart }} order by place_in_order rows between unbounded preceding and 1 preceding
        ) as reached
    from rows_in_order
),

pieces as (
    select
        subject_id, started, ended, cause, 0 as supplement{{ spellcurve._carried(o) }}
        {%- if o.rows == 'faulty' %}, raw_start, raw_end, raw_kind{% endif %},
        {{ spellcurve._first_fault([
            ['duplicate_row', 'copy_number > 1', spellcurve._text('another row of this subject has the same start and end')],
            [
                'overlaps_earlier', spellcurve._is_before('started', 'reached', o),
                spellcurve._detail(started, 'raw_start', 'is before an earlier row of this subject has ended')
            ]
        ], o, so_far=true) | indent(8) }}
    from rows_with_reach
)
{%- else -%}
pieces as (
    select
        subject_id, started, ended, cause, 0 as supplement{{ spellcurve._carried(o) }}
        {%- if o.rows == 'faulty' %}, raw_start, raw_end, raw_kind{% endif %},
        {{ spellcurve._first_fault(faults, o) | indent(8) }}
    from source_rows_read
)
{%- endif -%}
    {%- endset -%}

    {{ return(
        spellcurve._provenance('spells_from_intervals', {'relation': relation}, {
            'subject': subject, 'started': started, 'ended': ended, 'cause': cause, 'grace': grace, 'overlaps': overlaps,
            'as_of': o.as_of, 'observe_from': o.observe_from, 'recorded_at': recorded_at, 'unit': unit, 'carry': o.carry,
            'rows': rows, 'source_rows': source_rows
        }) ~ '\n' ~ spellcurve._spells_from_pieces(
            o, ctes, 'near' if overlaps == 'merge' else 'single', reach=grace, wait=grace, has_cause=cause is not none
        )
    ) }}
{% endmacro %}
