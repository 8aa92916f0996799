{#
    From pieces to spells; every builder on dates ends here.

    `ctes` ends with a CTE `pieces`, one row a source row: subject_id, started, ended (null: not over), cause, supplement (0 for a
    row that makes a piece of a spell, 1 for one that only counts to a spell, at whose start it then stands with no length), fault,
    the carried columns, and raw_start, raw_end, raw_kind, detail where the faulty rows are wanted.

    gather: 'near'   pieces of a subject that overlap, or whose gap is within `reach`, are one spell
            'keyed'  pieces with the same spell_key are one spell
            'single' each piece is a spell
    reach, inclusive: how long a gap is bridged (days, hours or minutes), the limit itself included or not
    wait: how long after an end a return would still undo it. Knowledge of ends stops so long before as_of.
    last_known: a moment in SQL after which nothing was observed, where that may come before as_of
#}
{% macro _spells_from_pieces(observation, ctes, gather, reach=0, inclusive=true, wait=0, last_known=none, has_cause=false) %}
    {%- set o = observation -%}
    {%- set never = spellcurve._never() -%}
    {%- set known_to = o.as_of_sql if last_known is none else 'least(' ~ o.as_of_sql ~ ', ' ~ last_known ~ ')' -%}
    {%- set cut = known_to if wait == 0 else spellcurve._moment_plus(known_to, 0 - wait, o.clock) -%}
    {%- set extra = [] -%}
    {%- if last_known is not none -%}{%- do extra.append(last_known) -%}{%- endif -%}
    {%- if gather == 'keyed' -%}{%- do extra.append('spell_key') -%}{%- endif -%}
    {%- set apart = spellcurve._apart_from_refused(o) -%}
with {{ ctes }},

pieces_as_known as (
    select
        subject_id, started, supplement, fault, {{ spellcurve._each_then_comma(extra) -}}
        case when ended > {{ o.as_of_sql }} then {{ never }} else coalesce(ended, {{ never }}) end as ended,
        cause
        {{- spellcurve._carried(o) }}{{ spellcurve._raw(o) }}
    from pieces
    {{ spellcurve._without_refused(o) }}
),
{% if gather == 'near' %}
pieces_in_order as (
    select
        *,
        row_number() over (
            partition by subject_id{{ apart }} order by started, supplement, ended, cause
        ) as place_in_order
    from pieces_as_known
),

reached_before as (
    select
        *,
        max(ended) over (
            partition by subject_id{{ apart }} order by place_in_order rows between unbounded preceding and 1 preceding
        ) as reached
    from pieces_in_order
),

first_pieces as (
    select
        *,
        case
            when reached is null then 1
            when {{ spellcurve._gap_is_within('reached', 'started', reach, inclusive, o) }} then 0
            else 1
        end as is_first
    from reached_before
),

pieces_by_spell as (
    select
        *,
        sum(is_first) over (
            partition by subject_id{{ apart }} order by place_in_order rows between unbounded preceding and current row
        ) as spell_key
    from first_pieces
),

spell_bounds as (
    select
        *,
        min(started) over (partition by subject_id{{ apart }}, spell_key) as spell_started,
        max(ended) over (partition by subject_id{{ apart }}, spell_key) as spell_ended,
        count(*) over (partition by subject_id{{ apart }}, spell_key) as source_rows
    from pieces_by_spell
),

spells_with_rows as (
    select
        *,
        min(case when ended = spell_ended then cause end) over (
            partition by subject_id{{ apart }}, spell_key
        ) as spell_cause
    from spell_bounds
),
{% elif gather == 'keyed' %}
spells_with_rows as (
    select
        *,
        case when supplement = 0 then 1 else 0 end as is_first,
        min(started) over (partition by subject_id{{ apart }}, spell_key) as spell_started,
        max(ended) over (partition by subject_id{{ apart }}, spell_key) as spell_ended,
        count(*) over (partition by subject_id{{ apart }}, spell_key) as source_rows,
        max(case when supplement = 0 then cause end) over (partition by subject_id{{ apart }}, spell_key) as spell_cause
    from pieces_as_known
),
{% else %}
spells_with_rows as (
    select
        *,
        1 as is_first,
        started as spell_started,
        ended as spell_ended,
        1 as source_rows,
        cause as spell_cause
    from pieces_as_known
),
{% endif %}
spells_as_seen as (
    select
        *,
        {{ cut }} as cut,
        coalesce(spell_cause, '{{ 'unknown' if has_cause else 'event' }}') as known_cause,
        case when spell_ended <= {{ cut }} then 1 else 0 end as event,
        case when spell_ended <= {{ cut }} then spell_ended else {{ cut }} end as last_seen
    from spells_with_rows
),
{% set whole_spell_faults = [
    [
        'starts_within_grace',
        'spell_started > cut',
        spellcurve._detail('start', 'spell_started', 'is too close to the end of what is known for an end to be final')
    ]
] -%}
{%- if o.observe_from is not none -%}
    {%- set observe_from = spellcurve._moment_literal(o.observe_from) -%}
    {%- do whole_spell_faults.append([
        'ended_before_observation',
        spellcurve._is_before('last_seen', observe_from, o),
        spellcurve._detail('last seen', 'last_seen', 'is before observe_from ' ~ o.observe_from)
    ]) -%}
{%- endif %}
spells_judged as (
    select
        subject_id, started, supplement, is_first, spell_started, last_seen, event, known_cause, source_rows
        {{- spellcurve._carried(o) }}
        {%- if o.rows == 'faulty' %}, raw_start, raw_end, raw_kind{% endif %},
        {{ spellcurve._first_fault(whole_spell_faults, o, so_far=true) | indent(8) }}
    from spells_as_seen
)
{% if o.rows == 'faulty' %}
select
    subject_id,
    {{ spellcurve._as_text('raw_start') }} as given_start,
    {{ spellcurve._as_text('raw_end') }} as given_end,
    {{ spellcurve._as_text('raw_kind') }} as given_kind,
    fault,
    detail
    {{- spellcurve._carried_to_result(o) }}
from spells_judged
where fault is not null
{%- else %}
select
    subject_id,
    {{ spellcurve._integer('row_number() over (partition by subject_id order by spell_started, last_seen, event, known_cause)') }}
        as spell_number,
    {{ spellcurve._date('spell_started') if o.by_day else spellcurve._moment_kept('spell_started') }} as started_at,
    {{ spellcurve._date('last_seen') if o.by_day else spellcurve._moment_kept('last_seen') }} as last_seen_at,
    {% if o.observe_from is none -%}
    {{ spellcurve._integer('0') }} as entry,
    {%- else -%}
    case
        when spell_started < {{ observe_from }} then {{ spellcurve._completed_units('spell_started', observe_from, o.unit) }}
        else {{ spellcurve._integer('0') }}
    end as entry,
    {%- endif %}
    {{ spellcurve._completed_units('spell_started', 'last_seen', o.unit) }} as duration,
    {{ spellcurve._integer('event') }} as event,
    case when event = 1 then known_cause end as cause,
    {{ spellcurve._integer('1') }} as weight
    {%- if o.source_rows %},
    {{ spellcurve._integer('source_rows') }} as source_rows
    {%- endif %}
    {{- spellcurve._carried_to_result(o) }}
from spells_judged
where is_first = 1 and fault is null
{%- endif %}
{%- endmacro %}
