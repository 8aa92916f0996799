{#
    Who leaves the risk set at a duration and who enters it late after it: the CTEs that end with `changes`, the first of which is the only
    one to read the spells (group_1, …, duration, own_cause if it is given as an expression, events, leaving, entered, is_step; one row for
    each duration, and cause). Every group has a row at 0, and one at the horizon if it comes so far. A spell whose entry equals its duration,
    and is not 0, was under observation at no duration: it only makes its group known. So does one without entry or duration, which is unsound.
#}
{% macro _changes(spells, by, horizon, own_cause=none) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set names = groups + ([] if own_cause is none else ['own_cause']) -%}
    {%- set keys = [] -%}
    {%- for name in by -%}{%- do keys.append(spellcurve._column(name)) -%}{%- endfor -%}
    {%- if own_cause is not none -%}{%- do keys.append(own_cause) -%}{%- endif -%}
    {%- set longest, latest = 'duration', 'entry' -%}
    {%- if horizon is not none -%}
        {%- set latest = 'least(entry, ' ~ (horizon + 1) ~ ')' -%}
        {#- beyond the horizon only two things matter: that the spell was still there, and whether it was ever at risk -#}
        {%- set longest = 'case when duration <= ' ~ horizon ~ ' then duration when entry < duration then ' ~ (horizon + 2)
            ~ ' when duration is not null then ' ~ (horizon + 1) ~ ' end' -%}
    {%- endif -%}
    {{ return(adapter.dispatch('_changes_summed', 'spellcurve')(spells, keys, names, groups, longest, latest, horizon)) }}
{% endmacro %}


{# Pairs of entry and duration are summed in one reading; then each pair is told apart into what it does. #}
{% macro default___changes_summed(spells, keys, names, groups, longest, latest, horizon) -%}
{%- set each_name = spellcurve._each_then_comma(names) -%}
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
        {{ each_name -}}
        case when entry < duration or entry = 0 then duration end as left_at,
        case when entry < duration and entry > 0 then entry end as entered_at,
        events, spells
    from pairs
),

{{ spellcurve._whole_numbers('sides', 'side', 1, 3 if horizon is none else 4) }},

-- each outcome as it leaves the risk set (1), enters it late (2), and makes sure of the rows at 0 (3) and at the horizon (4)
turns as (
    select
        {{ spellcurve._each_then_comma(groups) -}}
        case side when 1 then left_at when 2 then entered_at when 3 then 0{% if horizon is not none %} else {{ horizon }}{% endif %} end as duration,
        {%- if 'own_cause' in names %}
        case when side = 1 then own_cause end as own_cause,
        {%- endif %}
        case when side = 1 then events else 0 end as events,
        case when side = 1 then spells else 0 end as leaving,
        case when side = 2 then spells else 0 end as entered,
        case when side = 2 then 0 else 1 end as is_step
    from outcomes
    cross join sides
    where
        side = 3
        or (side = 1 and left_at is not null)
        or (side = 2 and entered_at is not null)
        {%- if horizon is not none %}
        or (side = 4 and left_at > {{ horizon }})
        {%- endif %}
),

changes as (
    select
        {{ each_name }}duration,
        sum(events) as events,
        sum(leaving) as leaving,
        sum(entered) as entered,
        max(is_step) as is_step
    from turns
    group by {{ each_name }}duration
)
{%- endmacro %}


{#
    DuckDB hands each spell to both sums as it reads it, and does without the second where the table's statistics say that nothing enters
    late (they see through these conditions, not through some others that mean the same). That spares a key; and where many spells enter
    late, pairs of entry and duration are almost as many as the spells. Multiplying by whether there was an event is sooner done than
    choosing row by row, and joining the few rows of both sums sooner than summing them again.
#}
{% macro duckdb___changes_summed(spells, keys, names, groups, longest, latest, horizon) -%}
{%- set each_name = spellcurve._each_then_comma(names) -%}
{%- set each_group = spellcurve._each_then_comma(groups) -%}
watched as (
    select
        {% for name in names %}{{ keys[loop.index0] }} as {{ name }}, {% endfor -%}
        entry, duration, event, weight
    from {{ spells }}
),

leaving as (
    select
        {{ each_name }}{{ longest }}{{ ' as duration' if longest != 'duration' }},
        coalesce(sum({{ spellcurve._double('event = 1') }} * weight), 0) as events,
        {{ spellcurve._double('sum(weight)') }} as leaving
    from watched
    where duration is not null and not (entry > 0 and entry >= duration)
    group by {{ each_name }}{{ longest }}
),

-- late entries, and nobody's: each group at 0, and at the horizon if it comes so far
entries as (
    select
        {{ each_group }}case when entry < duration then {{ latest }} else 0 end as duration,
        case when entry < duration then {{ spellcurve._double('weight') }} else 0 end as entered
    from watched
    where entry > 0 or entry is null or duration is null
    union all
    select {{ each_group }}0 as duration, 0 as entered
    from leaving
    {%- if horizon is not none %}
    union all
    select {{ each_group }}{{ horizon }} as duration, 0 as entered
    from leaving
    where duration > {{ horizon }}
    {%- endif %}
),

entering as (
    select {{ each_group }}duration, sum(entered) as entered
    from entries
    group by {{ each_group }}duration
),

changes as (
    select
        {% for group in groups %}coalesce(leaving.{{ group }}, entering.{{ group }}) as {{ group }}, {% endfor -%}
        coalesce(leaving.duration, entering.duration) as duration,
        {%- if 'own_cause' in names %}
        leaving.own_cause,
        {%- endif %}
        coalesce(leaving.events, 0) as events,
        coalesce(leaving.leaving, 0) as leaving,
        coalesce(entering.entered, 0) as entered,
        case
            when leaving.duration is null and entering.duration not in (0{% if horizon is not none %}, {{ horizon }}{% endif %}) then 0
            else 1
        end as is_step
    from leaving
    full join entering
        on {% for group in groups %}leaving.{{ group }} is not distinct from entering.{{ group }} and {% endfor -%}
        leaving.duration = entering.duration
        {%- if 'own_cause' in names %} and leaving.own_cause is null{% endif %}
)
{%- endmacro %}
