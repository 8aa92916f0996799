{% macro spells_from_event_log(
    relation, subject, happened, kind, opens, closes, sequence=none, grace=0,
    as_of=none, observe_from=none, recorded_at=none, unit='day', carry=[], rows='sound', source_rows=false
) %}
    {%- do spellcurve._check_call(
        'spells_from_event_log',
        {'relation': relation, 'subject': subject, 'happened': happened, 'kind': kind, 'opens': opens, 'closes': closes},
        ['relation', 'subject', 'happened', 'kind', 'opens', 'closes', 'sequence', 'grace', 'as_of', 'observe_from', 'recorded_at',
         'unit', 'carry', 'rows', 'source_rows'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('spells_from_event_log', 'spellcurve')(
        relation, subject, happened, kind, opens, closes, sequence, grace, as_of, observe_from, recorded_at, unit, carry, rows,
        source_rows
    )) }}
{% endmacro %}


{% macro default__spells_from_event_log(
    relation, subject, happened, kind, opens, closes, sequence, grace, as_of, observe_from, recorded_at, unit, carry, rows, source_rows
) %}
    {%- set caller_name = 'spells_from_event_log' -%}
    {%- set o = spellcurve._observation(
        caller_name, as_of, observe_from, recorded_at, unit, carry, rows, source_rows, grace
    ) -%}
    {%- for argument, name in {
        'subject': subject, 'happened': happened, 'kind': kind, 'sequence': sequence or subject
    }.items() -%}
        {%- do spellcurve._check_column(caller_name, argument, name) -%}
    {%- endfor -%}
    {%- set opening = spellcurve._check_values(caller_name, 'opens', opens) -%}
    {%- set closing = (closes.keys() | list) if closes is mapping else spellcurve._check_values(caller_name, 'closes', closes) -%}
    {%- if closing | length == 0 -%}
        {%- do spellcurve._fail(caller_name, 'closes is empty; it must be a kind, a list of kinds, or a mapping of kind to cause.') -%}
    {%- endif -%}
    {%- for value in opening if value in closing -%}
        {%- do spellcurve._fail(caller_name, "the kind '" ~ value ~ "' is in opens and in closes; it must be in one of them.") -%}
    {%- endfor -%}
    {%- set apart = spellcurve._apart_from_refused(o) -%}
    {%- set when_columns = 'moment, ' ~ ('sequence_value, ' if sequence else '') -%}
    {#- rows without a sequence come last, wherever the warehouse would put its nulls -#}
    {%- set in_order = 'moment, ' ~ ('case when sequence_value is null then 1 else 0 end, sequence_value, ' if sequence else '') -%}

    {%- set faults = spellcurve._recording_faults(o) + [
        ['no_subject', 'subject_id is null', spellcurve._text(subject ~ ' is null')],
        ['no_time', 'raw_start is null', spellcurve._text(happened ~ ' is null')],
        ['unreadable_time', 'moment is null', spellcurve._detail(happened, 'raw_start', 'is not a date or a time')],
        ['after_as_of', 'moment > ' ~ o.as_of_sql, spellcurve._detail(happened, 'raw_start', 'is after as_of ' ~ o.as_of)],
        ['no_kind', 'kind is null', spellcurve._text(kind ~ ' is null')],
        ['unknown_kind', 'is_open is null', spellcurve._detail(kind, 'kind', 'is neither among opens nor among closes')]
    ] -%}

    {%- set ctes -%}
source_rows_read as (
    select
        {{- spellcurve._recorded_columns(o) }}
        {{ spellcurve._column(subject) }} as subject_id,
        {{ spellcurve._column(happened) }} as raw_start,
        {{ spellcurve._read_moment(spellcurve._column(happened)) }} as moment,
        {%- if sequence %}
        {{ spellcurve._column(sequence) }} as sequence_value,
        {%- endif %}
        {{ spellcurve._as_text(spellcurve._column(kind)) }} as kind
        {{- spellcurve._carried_from_source(o) }}
    from {{ relation }}
),

rows_with_side as (
    select
        *,
        case
            when kind in ({{ spellcurve._texts(opening) }}) then 1
            when kind in ({{ spellcurve._texts(closing) }}) then 0
        end as is_open
    from source_rows_read
),

rows_judged as (
    select
        subject_id, {{ when_columns }}kind, is_open{{ spellcurve._carried(o) }}
        {%- if o.rows == 'faulty' %}, raw_start, null as raw_end, kind as raw_kind{% endif %},
        {{ spellcurve._first_fault(faults, o) | indent(8) }}
    from rows_with_side
),

rows_counted as (
    select
        *,
        row_number() over (partition by subject_id{{ apart }}, {{ when_columns }}kind order by moment) as copy_number
    from rows_judged
    {{ spellcurve._without_refused(o) }}
),

single_rows as (
    select
        subject_id, {{ when_columns }}kind, is_open{{ spellcurve._carried(o) }}
        {%- if o.rows == 'faulty' %}, raw_start, raw_end, raw_kind{% endif %},
        {{ spellcurve._first_fault([
            ['duplicate_row', 'copy_number > 1', spellcurve._text('another row of this subject has the same time and kind')]
        ], o, so_far=true) | indent(8) }}
    from rows_counted
),

moments_with_sides as (
    select
        *,
        case
            when min(is_open) over (partition by subject_id{{ apart }}, {{ when_columns[:-2] }})
                <> max(is_open) over (partition by subject_id{{ apart }}, {{ when_columns[:-2] }}) then 1
            else 0
        end as is_mixed,
        row_number() over (partition by subject_id{{ apart }} order by {{ in_order }}kind) as place_in_order
    from single_rows
    {{ spellcurve._without_refused(o) }}
),

-- a moment with both an opening and a closing leaves the state as it was, so the state before it is that of the last other moment
states_before as (
    select
        *,
        coalesce(mod(max(case when is_mixed = 0 then 2 * place_in_order + is_open end) over (
            partition by subject_id{{ apart }} order by place_in_order rows between unbounded preceding and 1 preceding
        ), 2), 0) as was_open
    from moments_with_sides
),

rows_in_order as (
    select
        *,
        row_number() over (
            partition by subject_id{{ apart }}
            order by {{ in_order }}case when is_mixed = 1 and was_open = 0 then 1 - is_open else is_open end, kind
        ) as place
    from states_before
),

rows_after_another as (
    select
        *,
        coalesce(lag(is_open) over (partition by subject_id{{ apart }} order by place), 0) as stands_open
    from rows_in_order
),

turns_judged as (
    select
        subject_id, moment, place, kind, is_open{{ spellcurve._carried(o) }}
        {%- if o.rows == 'faulty' %}, raw_start, raw_end, raw_kind{% endif %},
        {{ spellcurve._first_fault([
            [
                'already_open', 'is_open = 1 and stands_open = 1',
                spellcurve._detail(kind, 'kind', 'opens a spell while one is open')
            ],
            ['nothing_open', 'is_open = 0 and stands_open = 0', spellcurve._detail(kind, 'kind', 'closes a spell while none is open')]
        ], o, so_far=true) | indent(8) }}
    from rows_after_another
),

turns_by_spell as (
    select
        *,
        sum(is_open) over (
            partition by subject_id{{ apart }} order by place rows between unbounded preceding and current row
        ) as turn_key
    from turns_judged
    {{ spellcurve._without_refused(o) }}
),

pieces as (
    select
        subject_id,
        max(case when is_open = 1 then moment end) over (partition by subject_id{{ apart }}, turn_key) as started,
        max(case when is_open = 0 then moment end) over (partition by subject_id{{ apart }}, turn_key) as ended,
        {% if closes is mapping -%}
        max(
            case
                {%- for value, label in closes.items() %}
                when is_open = 0 and kind = {{ spellcurve._text(value) }} then {{ spellcurve._text(label) }}
                {%- endfor %}
            end
        ) over (partition by subject_id{{ apart }}, turn_key) as cause,
        {%- else -%}
        {{ spellcurve._as_text('null') }} as cause,
        {%- endif %}
        1 - is_open as supplement,
        fault{{ spellcurve._carried(o) }}{{ spellcurve._raw(o) }}
    from turns_by_spell
)
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'relation': relation}, {
            'subject': subject, 'happened': happened, 'kind': kind, 'opens': opening, 'closes': closes if closes is mapping else closing,
            'sequence': sequence, 'grace': grace, 'as_of': o.as_of, 'observe_from': o.observe_from, 'recorded_at': recorded_at,
            'unit': unit, 'carry': o.carry, 'rows': rows, 'source_rows': source_rows
        }) ~ '\n' ~ spellcurve._spells_from_pieces(o, ctes, 'near', reach=grace, wait=grace, has_cause=closes is mapping)
    ) }}
{% endmacro %}
