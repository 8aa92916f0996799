{% macro difference_at(curve, between, durations, reference=none, by=[], confidence=0.95, test_scale='linear') %}
    {%- do spellcurve._check_call(
        'difference_at',
        {'curve': curve, 'between': between, 'durations': durations},
        ['curve', 'between', 'durations', 'reference', 'by', 'confidence', 'test_scale'],
        kwargs, varargs
    ) -%}
    {{ return(adapter.dispatch('difference_at', 'spellcurve')(curve, between, durations, reference, by, confidence, test_scale)) }}
{% endmacro %}


{# A survival and its standard error on the scale of the test, by the delta method; null where the scale has no place for it. #}
{% macro _on_test_scale(scale) %}
    {%- set relative = 'std_error / survival' -%}
    {%- set scales = {
        'linear': ['1 = 1', 'survival', 'std_error'],
        'log': ['survival > 0', 'ln(survival)', relative],
        'log-log': ['survival > 0 and survival < 1', 'ln(0 - ln(survival))', relative ~ ' / (0 - ln(survival))'],
        'logit': ['survival > 0 and survival < 1', 'ln(survival / (1 - survival))', relative ~ ' / (1 - survival)'],
        'arcsine': ['survival > 0 and survival < 1', 'asin(sqrt(survival))', relative ~ ' * sqrt(survival / (1 - survival)) / 2']
    } -%}
    {%- set condition, position, spread = scales[scale] -%}
    {%- if scale == 'linear' -%}
        {{ return({'position': position, 'spread': spread}) }}
    {%- endif -%}
    {{ return({
        'position': 'case when ' ~ condition ~ ' then ' ~ position ~ ' end',
        'spread': 'case when ' ~ condition ~ ' then ' ~ spread ~ ' end'
    }) }}
{% endmacro %}


{% macro default__difference_at(curve, between, durations, reference, by, confidence, test_scale) %}
    {%- set caller_name = 'difference_at' -%}
    {%- set compared = spellcurve._compared(
        caller_name, between, [], by, spellcurve._survival_curve_columns() + spellcurve._difference_columns('survival', 'duration')
    ) -%}
    {%- set durations = spellcurve._check_whole_list(caller_name, 'durations', durations, 0) -%}
    {%- do spellcurve._check_reference(caller_name, reference, true, 'groups are compared with one of them') -%}
    {%- do spellcurve._check_share(caller_name, 'confidence', confidence) -%}
    {%- do spellcurve._check_choice(caller_name, 'test_scale', test_scale, spellcurve._interval_scales()) -%}
    {%- set each, group = compared.each, compared.group -%}
    {%- set scaled = spellcurve._on_test_scale(test_scale) -%}
    {%- set body -%}
with {{ spellcurve._curve_rows(curve, compared.columns) }},

{{ spellcurve._listed('durations_wanted', 'wanted', durations) }},

rows_in_force as (
    select
        {{ each }}{{ group }}, wanted, survival,
        case when survival > 0 then std_error end as std_error,
        {{ spellcurve._status_at('wanted') }} as status
    from curve_rows
    cross join durations_wanted
    where {{ spellcurve._is_in_force('wanted') }}
),

figures_of_groups as (
    select
        {{ each }}{{ spellcurve._as_text(group) }} as group_label,
        case when {{ spellcurve._is_reference(group, reference) }} then 1 else 0 end as is_reference,
        wanted, status, std_error,
        survival as figure,
        {{ scaled.position }} as position,
        {{ scaled.spread }} as spread
    from rows_in_force
),

{{ spellcurve._differences('figures_of_groups', compared, reference, confidence, 'survival', 'duration', '1') }}
    {%- endset -%}
    {{ return(
        spellcurve._provenance(caller_name, {'curve': curve}, {
            'between': between, 'durations': durations, 'reference': reference, 'by': compared.by, 'confidence': confidence,
            'test_scale': test_scale
        }) ~ '\n' ~ body
    ) }}
{% endmacro %}
