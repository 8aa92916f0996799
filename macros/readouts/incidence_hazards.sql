{% macro incidence_hazards(incidence, by=[]) %}
    {%- do spellcurve._check_call('incidence_hazards', {'incidence': incidence}, ['incidence', 'by'], kwargs, varargs) -%}
    {{ return(adapter.dispatch('incidence_hazards', 'spellcurve')(incidence, by)) }}
{% endmacro %}


{% macro default__incidence_hazards(incidence, by) %}
    {%- set caller_name = 'incidence_hazards' -%}
    {%- set by = spellcurve._check_columns(
        caller_name, 'by', by,
        spellcurve._cumulative_incidence_columns() + ['hazard', 'cumulative_hazard', 'cumulative_hazard_std_error']
    ) -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set so_far = spellcurve._partition_by(groups + ['cause'])
        ~ 'order by duration rows between unbounded preceding and current row' -%}
    {%- set body -%}
with {{ spellcurve._incidence_rows(incidence, by) }},

hazards as (
    select
        {{ each_group }}cause, duration, at_risk, events,
        case
            when events is null or at_risk is null then null
            when events > 0 then {{ spellcurve._double('events') }} / {{ spellcurve._double('at_risk') }}
            else 0
        end as hazard,
        case
            when events is null or at_risk is null then null
            when events > 0 then {{ spellcurve._double('events') }} / {{ spellcurve._double('at_risk') }} / {{ spellcurve._double('at_risk') }}
            else 0
        end as variance_step
    from incidence_rows
),

-- after a count that is not known no sum is
running_sums as (
    select
        {{ each_group }}cause, duration, at_risk, events, hazard,
        sum(case when hazard is null then 1 else 0 end) over ({{ so_far }}) as unknown_steps,
        sum(hazard) over ({{ so_far }}) as cumulative_hazard,
        sum(variance_step) over ({{ so_far }}) as cumulative_variance
    from hazards
)

select
    {{ spellcurve._aliases_as(groups, by) }}cause,
    {{ spellcurve._integer('duration') }} as duration,
    at_risk,
    events,
    {{ spellcurve._double('hazard') }} as hazard,
    {{ spellcurve._double('case when unknown_steps = 0 then cumulative_hazard end') }} as cumulative_hazard,
    {{ spellcurve._double('case when unknown_steps = 0 then sqrt(cumulative_variance) end') }} as cumulative_hazard_std_error
from running_sums
    {%- endset -%}
    {{ return(spellcurve._provenance(caller_name, {'incidence': incidence}, {'by': by}) ~ '\n' ~ body) }}
{% endmacro %}
