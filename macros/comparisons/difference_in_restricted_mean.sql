{% macro difference_in_restricted_mean(curve, between, horizon, reference=none, by=[], confidence=0.95) %}
    {%- do spellcurve._check_call(
        'difference_in_restricted_mean',
        {'curve': curve, 'between': between, 'horizon': horizon},
        ['curve', 'between', 'horizon', 'reference', 'by', 'confidence'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('difference_in_restricted_mean', 'spellcurve')(curve, between, horizon, reference, by, confidence)) }}
{% endmacro %}


{% macro default__difference_in_restricted_mean(curve, between, horizon, reference, by, confidence) %}
    {%- set caller_name = 'difference_in_restricted_mean' -%}
    {%- set compared = spellcurve._compared(
        caller_name, between, [], by,
        spellcurve._survival_curve_columns() + spellcurve._difference_columns('restricted_mean', 'horizon')
        + ['survived', 'restricted_mean', 'restricted_mean_lower', 'restricted_mean_upper']
    ) -%}
    {%- set horizons = spellcurve._check_whole_list(caller_name, 'horizon', horizon, 1) -%}
    {%- do spellcurve._check_reference(caller_name, reference, true, 'groups are compared with one of them') -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {%- set each, group = compared.each, compared.group -%}
    {%- set plain_names = spellcurve._aliases(compared.columns, 'compared_') -%}
    {%- set curve_of_groups -%}
(
    select
        {{ spellcurve._columns_as(compared.columns, plain_names) }}duration, at_risk, events, censored, survival, std_error, survival_lower,
        survival_upper
    from {{ curve }}
) as curve_of_groups
    {%- endset -%}
    {%- set means = spellcurve._without_provenance(spellcurve.restricted_mean(curve_of_groups, horizons, by=plain_names)) -%}
    {%- set body -%}
with means_of_groups as (
    select
        {{ spellcurve._columns_as(plain_names, compared.segments + [group]) }}horizon, restricted_mean, std_error, status
    from (
{{ means }}
    ) as restricted_means
),

figures_of_groups as (
    select
        {{ each }}{{ spellcurve._as_text(group) }} as group_label,
        case when {{ spellcurve._is_reference(group, reference) }} then 1 else 0 end as is_reference,
        horizon as wanted,
        status, std_error,
        restricted_mean as figure,
        restricted_mean as position,
        std_error as spread
    from means_of_groups
),

{{ spellcurve._differences('figures_of_groups', compared, reference, confidence, 'restricted_mean', 'horizon', 'wanted') }}
    {%- endset -%}
    {{ return(
        spellcurve._provenance(caller_name, {'curve': curve}, {
            'between': between, 'horizon': horizons, 'reference': reference, 'by': compared.by, 'confidence': confidence
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
