{% macro survival_at(curve, durations, by=[]) %}
    {%- do spellcurve._check_call(
        'survival_at', {'curve': curve, 'durations': durations}, ['curve', 'durations', 'by'], kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('survival_at', 'spellcurve')(curve, durations, by)) }}
{% endmacro %}


{% macro _survival_at_columns() %}
    {{ return([
        'duration', 'survival', 'survival_lower', 'survival_upper', 'event_share', 'event_share_lower', 'event_share_upper', 'at_risk',
        'status'
    ]) }}
{% endmacro %}


{% macro default__survival_at(curve, durations, by) %}
    {%- set caller_name = 'survival_at' -%}
    {%- set by = spellcurve._check_columns(
        caller_name, 'by', by, spellcurve._survival_curve_columns() + spellcurve._survival_at_columns()
    ) -%}
    {%- set durations = spellcurve._check_whole_list(caller_name, 'durations', durations, 0) -%}
    {%- set groups = spellcurve._aliases(by, 'group_') -%}
    {%- set each_group = spellcurve._each_then_comma(groups) -%}
    {%- set body -%}
with {{ spellcurve._curve_rows(curve, by) }},

{{ spellcurve._listed('durations_wanted', 'wanted', durations) }},

rows_in_force as (
    select
        {{ each_group }}wanted, survival, survival_lower, survival_upper,
        {{ spellcurve._at_risk_at('wanted') }} as at_risk,
        {{ spellcurve._status_at('wanted') }} as status
    from curve_rows
    cross join durations_wanted
    where {{ spellcurve._is_in_force('wanted') }}
)

select
    {{ spellcurve._aliases_as(groups, by) }}{{ spellcurve._integer('wanted') }} as duration,
    case when status = 'observed' then survival end as survival,
    case when status = 'observed' then survival_lower end as survival_lower,
    case when status = 'observed' then survival_upper end as survival_upper,
    case when status = 'observed' then 1 - survival end as event_share,
    case when status = 'observed' then 1 - survival_upper end as event_share_lower,
    case when status = 'observed' then 1 - survival_lower end as event_share_upper,
    case when status in ('observed', 'too_few_at_risk') then at_risk end as at_risk,
    status
from rows_in_force
    {%- endset -%}

    {{ return(
        spellcurve._provenance(caller_name, {'curve': curve}, {'durations': durations, 'by': by}) ~ '\n' ~ body
    ) }}
{% endmacro %}
