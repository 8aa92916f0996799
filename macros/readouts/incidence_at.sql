{% macro incidence_at(incidence, durations, by=[]) %}
    {%- do spellcurve._check_call(
        'incidence_at', {'incidence': incidence, 'durations': durations}, ['incidence', 'durations', 'by'], kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('incidence_at', 'spellcurve')(incidence, durations, by)) }}
{% endmacro %}


{% macro default__incidence_at(incidence, durations, by) %}
    {%- set caller_name = 'incidence_at' -%}
    {%- set by = spellcurve._check_columns(caller_name, 'by', by, spellcurve._cumulative_incidence_columns() + ['status']) -%}
    {%- set durations = spellcurve._check_whole_list(caller_name, 'durations', durations, 0) -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups + ['cause']) -%}
    {%- set figures = ['incidence', 'incidence_lower', 'incidence_upper'] -%}
    {%- set body -%}
with {{ spellcurve._incidence_rows(incidence, by) }},

rows_with_neighbours as (
    select
        {{ each_group }}cause, duration, at_risk, {{ figures | join(', ') }}, last_duration, total_at_end,
        lag(duration) over ({{ partition }}order by duration) as previous_duration,
        lead(duration) over ({{ partition }}order by duration) as next_duration,
        lead(at_risk) over ({{ partition }}order by duration) as next_at_risk,
        lead(incidence) over ({{ partition }}order by duration) as next_incidence
    from incidence_rows
),

rows_repeated as (
    select
        {{ each_group }}cause, duration, at_risk, {{ figures | join(', ') }}, last_duration, total_at_end, previous_duration,
        next_duration, next_at_risk, next_incidence,
        max(case when next_duration = duration then 1 else 0 end) over ({{ partition | trim }}) as is_several_curves
    from rows_with_neighbours
),

{{ spellcurve._listed('durations_wanted', 'wanted', durations) }},

-- once nobody is left, every incidence is known for ever
rows_in_force as (
    select
        {{ each_group }}cause, wanted, {{ figures | join(', ') }},
        case
            when duration = wanted then at_risk
            when next_duration is not null then next_at_risk
            when total_at_end >= 1 - 1e-9 then 0
        end as at_risk,
        case
            when is_several_curves = 1 then 'several_curves'
            when duration > wanted then 'beyond_follow_up'
            when wanted > last_duration and coalesce(total_at_end, 0) < 1 - 1e-9 then 'beyond_follow_up'
            when incidence is null then 'too_few_at_risk'
            when duration < wanted and next_duration is not null and next_incidence is null then 'too_few_at_risk'
            else 'observed'
        end as status
    from rows_repeated
    cross join durations_wanted
    where (duration <= wanted or previous_duration is null) and (next_duration > wanted or next_duration is null)
)

select
    {{ spellcurve._aliases_as(groups, by) }}cause,
    {{ spellcurve._integer('wanted') }} as duration,
    {%- for name in figures %}
    case when status = 'observed' then {{ name }} end as {{ name }},
    {%- endfor %}
    case when status in ('observed', 'too_few_at_risk') then at_risk end as at_risk,
    status
from rows_in_force
    {%- endset -%}
    {{ return(
        spellcurve._provenance(caller_name, {'incidence': incidence}, {'durations': durations, 'by': by}) ~ '\n' ~ body
    ) }}
{% endmacro %}


{#
    What read-outs of incidences begin with: the CTEs that end with `incidence_rows`, the table under the read-outs' own names, with the last
    duration of the group and what its causes add up to there.
#}
{% macro _incidence_rows(incidence, by) %}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set partition = spellcurve._partition_by(groups) | trim -%}
    {%- set figures = ['incidence', 'std_error', 'incidence_lower', 'incidence_upper'] -%}
published_rows as (
    select
        {{ spellcurve._columns_as(by, groups) }}cause,
        {{ spellcurve._integer('duration') }} as duration,
        at_risk, events,
        {%- for name in figures %}
        {{ spellcurve._double(name) }} as {{ name }}{{ ',' if not loop.last }}
        {%- endfor %}
    from {{ incidence }}
),

rows_with_end as (
    select
        {{ each_group }}cause, duration, at_risk, events, {{ figures | join(', ') }},
        max(duration) over ({{ partition }}) as last_duration
    from published_rows
),

incidence_rows as (
    select
        {{ each_group }}cause, duration, at_risk, events, {{ figures | join(', ') }}, last_duration,
        sum(case when duration = last_duration then incidence end) over ({{ partition }}) as total_at_end
    from rows_with_end
)
{%- endmacro %}
