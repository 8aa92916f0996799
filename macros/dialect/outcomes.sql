{#
    The spells, summed over those alike: the CTEs that end with `outcomes`, the only ones to read the spells. It has the columns `names`
    of the expressions `keys`, left_at (null for a spell that was never at risk), entered_at (null unless it entered late), events and spells
    (both are weights). A spell is counted in a row with its left_at and its entered_at, or in one with each.
    longest and latest are duration and entry, or expressions that cut them short but keep apart those that differ.
#}

{% macro _outcomes(spells, keys, names, longest, latest) %}
    {{ return(adapter.dispatch('_outcomes', 'spellcurve')(spells, keys, names, longest, latest)) }}
{% endmacro %}


{% macro default___outcomes(spells, keys, names, longest, latest) -%}
pairs as (
    select
        {% for name in names %}{{ keys[loop.index0] }} as {{ name }}, {% endfor -%}
        {{ latest }} as entry,
        {{ longest }} as duration,
        sum(case when event = 1 then {{ spellcurve._double('weight') }} else 0 end) as events,
        sum({{ spellcurve._double('weight') }}) as spells
    from {{ spells }}
    group by {{ spellcurve._each_then_comma(keys) }}{{ latest }}, {{ longest }}
),

outcomes as (
    select
        {{ spellcurve._each_then_comma(names) -}}
        case when entry < duration or entry = 0 then duration end as left_at,
        case when entry < duration and entry > 0 then entry end as entered_at,
        events, spells
    from pairs
)
{%- endmacro %}


{#
    DuckDB hands each spell to both sums as it reads it, and does without the second where the table's statistics say that nothing enters
    late (they see through these conditions, not through some others that mean the same). That spares a key; and where many spells enter
    late, pairs of entry and duration are almost as many as the spells. Multiplying by whether there was an event is sooner done than
    choosing row by row.
#}
{% macro duckdb___outcomes(spells, keys, names, longest, latest) -%}
{%- set each_name = spellcurve._each_then_comma(names) -%}
{%- set entered_at = 'case when entry < duration then ' ~ latest ~ ' end' -%}
watched as (
    select
        {% for name in names %}{{ keys[loop.index0] }} as {{ name }}, {% endfor -%}
        entry, duration, event, weight
    from {{ spells }}
),

outcomes as (
    select
        {{ each_name }}{{ longest }} as left_at, null as entered_at,
        coalesce(sum({{ spellcurve._double('event = 1') }} * weight), 0) as events,
        {{ spellcurve._double('sum(weight)') }} as spells
    from watched
    where not (entry > 0 and entry >= duration)
    group by {{ each_name }}{{ longest }}
    union all
    select
        {{ each_name }}null as left_at, {{ entered_at }} as entered_at,
        0 as events,
        {{ spellcurve._double('sum(weight)') }} as spells
    from watched
    where entry > 0
    group by {{ each_name }}{{ entered_at }}
)
{%- endmacro %}
