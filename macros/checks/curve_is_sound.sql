{#
    A generic test for a survival curve: shares within 0 and 1 that never rise, bounds in order, one row a duration and one at 0, and
    counts that add up. With `spells`, the spell table behind it, every count is recounted; without, nobody may join the risk set later
    unless late_entry is true. Name the horizon if the curve has one: it then need not reach the end of follow-up.
#}
{% test curve_is_sound(model, by=[], spells=none, horizon=none, late_entry=false) %}
    {{ adapter.dispatch('_unsound_curve_rows', 'spellcurve')(
        model, spellcurve._check_columns('curve_is_sound', 'by', by, spellcurve._survival_curve_columns()), spells, horizon, late_entry
    ) }}
{% endtest %}


{% macro default___unsound_curve_rows(model, by, spells, horizon, late_entry) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) -%}
    {%- set curve_columns = ['survival', 'survival_lower', 'survival_upper', 'std_error', 'hazard', 'cumulative_hazard'] -%}
with rows_of_curve as (
    select
        {{ spellcurve._columns_as(by, groups) }}duration, 0 as source_side,
        {%- for name in ['at_risk', 'events', 'censored'] + curve_columns %}
        {{ spellcurve._double(name) }} as {{ name }},
        {%- endfor %}
        0 as entering, 0 as leaving, 0 as ending
    from {{ model }}
),

{% if spells is not none -%}
outcomes as (
    select
        {{ spellcurve._columns_as(by, groups) }}entry, duration, event, weight
    from {{ spells }}
    where entry < duration or entry = 0
),

sides as (
    select 1 as side
    union all
    select 2 as side
),

-- whoever enters at a duration, or ends there, is counted for the durations after it; entries at 0 come before everything
rows_of_spells as (
    select
        {{ each_group -}}
        case when side = 1 then case when entry = 0 then -1 else entry end else duration end as duration,
        sum(case when side = 1 then {{ spellcurve._double('weight') }} else 0 end) as entering,
        sum(case when side = 2 then {{ spellcurve._double('weight') }} else 0 end) as leaving,
        sum(case when side = 2 and event = 1 then {{ spellcurve._double('weight') }} else 0 end) as ending
    from outcomes
    cross join sides
    group by {{ each_group }}case when side = 1 then case when entry = 0 then -1 else entry end else duration end
),

rows_together as (
    select
        {{ each_group }}duration, source_side, at_risk, events, censored, {{ curve_columns | join(', ') }}, entering, leaving, ending
    from rows_of_curve
    union all
    select
        {{ each_group }}duration, 1 as source_side, null as at_risk, null as events, null as censored,
        {%- for name in curve_columns %} null as {{ name }},{% endfor %} entering, leaving, ending
    from rows_of_spells
),

{% else -%}
rows_together as (
    select
        {{ each_group }}duration, source_side, at_risk, events, censored, {{ curve_columns | join(', ') }}, entering, leaving, ending
    from rows_of_curve
),

{% endif -%}
{%- set before = partition ~ 'order by duration, source_side rows between unbounded preceding and 1 preceding' -%}
{%- set so_far = partition ~ 'order by duration, source_side rows between unbounded preceding and current row' -%}
rows_with_neighbours as (
    select
        *,
        coalesce(sum(entering - leaving) over ({{ before }}), 0) as recounted_at_risk,
        sum(leaving) over ({{ so_far }}) as recounted_leaving,
        sum(ending) over ({{ so_far }}) as recounted_ending,
        coalesce(sum(coalesce(events, 0) + coalesce(censored, 0)) over ({{ before }}), 0) as leaving_before,
        coalesce(sum(events) over ({{ before }}), 0) as ending_before,
        min(survival) over ({{ before }}) as lowest_survival_before,
        max(cumulative_hazard) over ({{ before }}) as highest_hazard_before,
        {%- set rows_at_duration = spellcurve._partition_by(groups + ['duration', 'source_side']) %}
        count(*) over ({{ rows_at_duration | trim }}) as copies,
        min(case when source_side = 0 then duration end) over ({{ partition | trim }}) as first_duration,
        max(case when source_side = 0 then duration end) over ({{ partition | trim }}) as last_duration,
        max(case when events is null and source_side = 0 then 1 else 0 end) over ({{ partition | trim }}) as hides_counts
    from rows_together
),

curve_rows_after_another as (
    select
        *,
        lag(at_risk) over ({{ partition }}order by source_side, duration) as last_at_risk,
        lag(events + censored) over ({{ partition }}order by source_side, duration) as last_leaving
    from rows_with_neighbours
),

rows_with_problems as (
    select
        {{ each_group }}duration,
        case
            when source_side = 1 and first_duration is null then 'a group of the spells has no curve'
            {%- if spells is not none %}
            {%- if horizon is none %}
            when source_side = 1 and duration > last_duration then 'the curve ends before the follow-up of its spells'
            {%- endif %}
            when source_side = 1 and hides_counts = 0 and duration <= last_duration
                and abs(recounted_leaving - leaving_before) > 1e-9 * (1 + recounted_leaving)
                then 'events and censored up to here are not those of the spells'
            when source_side = 1 and hides_counts = 0 and duration <= last_duration
                and abs(recounted_ending - ending_before) > 1e-9 * (1 + recounted_ending)
                then 'events up to here are not those of the spells'
            {%- endif %}
            when source_side = 1 then null
            when duration is null or duration < 0 then 'duration is null or negative'
            when first_duration <> 0 then 'the group has no row at duration 0'
            when copies > 1 then 'the duration stands on several rows of its group'
            when at_risk < 0 or events < 0 or censored < 0 then 'a count is negative'
            when events + censored > at_risk * (1 + 1e-9) then 'more ended or were censored than were at risk'
            when survival < 0 or survival > 1 or hazard < 0 or hazard > 1 then 'a share is outside 0 and 1'
            when survival_lower < 0 or survival_upper > 1 then 'a bound is outside 0 and 1'
            when survival_lower > survival * (1 + 1e-12) or survival_upper < survival * (1 - 1e-12) then 'survival is outside its bounds'
            when std_error < 0 or cumulative_hazard < 0 then 'a figure is negative'
            when survival > lowest_survival_before * (1 + 1e-12) then 'survival rises'
            when cumulative_hazard < highest_hazard_before * (1 - 1e-12) then 'cumulative_hazard falls'
            when duration > 0 and (survival is null) <> (hazard is null) then 'survival and hazard are not null together'
            {%- if spells is not none %}
            when abs(at_risk - recounted_at_risk) > 1e-9 * (1 + recounted_at_risk)
                then 'at_risk is not the number of spells under observation'
            {%- elif not late_entry %}
            when at_risk > (last_at_risk - last_leaving) * (1 + 1e-9) then 'at_risk grows, though nobody may enter late'
            {%- endif %}
        end as problem
    from curve_rows_after_another
)

select {{ spellcurve._aliases_as(groups, by) }}duration, problem
from rows_with_problems
where problem is not null
{% endmacro %}
