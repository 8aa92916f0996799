{#
    A generic test for cumulative incidences: one row a cause and duration and one at 0, shares within 0 and 1 that never fall, bounds
    in order, counts that fit each other, and causes that add up to no more than 1. With `curve`, the survival curve of the same spells and
    groups, survival and all causes have to add up to 1 at every duration that both have.
#}
{% test incidence_is_sound(model, by=[], curve=none) %}
    {{ adapter.dispatch('_unsound_incidence_rows', 'spellcurve')(
        model, spellcurve._check_columns('incidence_is_sound', 'by', by, spellcurve._cumulative_incidence_columns()), curve
    ) }}
{% endtest %}


{% macro default___unsound_incidence_rows(model, by, curve) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set of_cause = spellcurve._partition_by(groups + ['source_side', 'cause']) -%}
    {%- set at_duration = spellcurve._partition_by(groups + ['duration']) -%}
    {%- set figures = ['at_risk', 'events', 'incidence', 'std_error', 'incidence_lower', 'incidence_upper'] -%}
with incidence_rows as (
    select
        {{ spellcurve._columns_as(by, groups) }}cause, duration, 0 as source_side,
        {%- for name in figures %}
        {{ spellcurve._double(name) }} as {{ name }},
        {%- endfor %}
        {{ spellcurve._double('null') }} as survival
    from {{ model }}
),

rows_together as (
    select {{ each_group }}cause, duration, source_side, {{ figures | join(', ') }}, survival
    from incidence_rows
    {%- if curve is not none %}
    union all
    select
        {{ spellcurve._columns_as(by, groups) }}{{ spellcurve._as_text('null') }} as cause, duration, 1 as source_side,
        {%- for name in figures %}
        {{ spellcurve._double('null') }} as {{ name }},
        {%- endfor %}
        {{ spellcurve._double('survival') }} as survival
    from {{ curve }}
    {%- endif %}
),

rows_with_neighbours as (
    select
        {{ each_group }}cause, duration, source_side, {{ figures | join(', ') }}, survival,
        max(incidence) over ({{ of_cause }}order by duration rows between unbounded preceding and 1 preceding) as highest_before,
        min(duration) over ({{ of_cause | trim }}) as first_duration,
        count(*) over ({{ spellcurve._partition_by(groups + ['source_side', 'cause', 'duration']) | trim }}) as copies,
        sum(case when source_side = 0 then incidence end) over ({{ at_duration | trim }}) as sum_of_causes,
        sum(case when source_side = 0 then events end) over ({{ at_duration | trim }}) as all_events,
        max(case when source_side = 0 then at_risk end) over ({{ at_duration | trim }}) as most_at_risk,
        min(case when source_side = 0 then at_risk end) over ({{ at_duration | trim }}) as least_at_risk,
        sum(case when source_side = 0 and incidence is null then 1 else 0 end) over ({{ at_duration | trim }}) as unknown_incidences,
        sum(1 - source_side) over ({{ at_duration | trim }}) as causes_here
    from rows_together
),

rows_with_problems as (
    select
        {{ each_group }}cause, duration,
        case
            when source_side = 1 and causes_here > 0 and unknown_incidences = 0 and survival is not null
                and abs(survival + sum_of_causes - 1) > 1e-9
                then 'survival and the causes do not add up to 1'
            when source_side = 1 then null
            when duration is null or duration < 0 then 'duration is null or negative'
            when cause is null then 'cause is null'
            when first_duration <> 0 then 'the cause has no row at duration 0'
            when copies > 1 then 'the duration stands on several rows of its cause'
            when at_risk < 0 or events < 0 then 'a count is negative'
            when all_events > at_risk * (1 + 1e-9) then 'more ended than were at risk'
            when most_at_risk > least_at_risk then 'the causes of one duration have different numbers at risk'
            when incidence < 0 or incidence > 1 + 1e-9 then 'a share is outside 0 and 1'
            when sum_of_causes > 1 + 1e-9 then 'the causes add up to more than 1'
            when incidence_lower < 0 or incidence_upper > 1 then 'a bound is outside 0 and 1'
            when incidence_lower > incidence * (1 + 1e-9) or incidence_upper < incidence * (1 - 1e-9) then 'incidence is outside its bounds'
            when std_error < 0 then 'a figure is negative'
            when incidence < highest_before * (1 - 1e-12) then 'incidence falls'
        end as problem
    from rows_with_neighbours
)

select {{ spellcurve._aliases_as(groups, by) }}cause, duration, problem
from rows_with_problems
where problem is not null
{% endmacro %}
