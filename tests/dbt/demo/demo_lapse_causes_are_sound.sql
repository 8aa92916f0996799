{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_incidence_is_sound(
    ref('demo_lapse_causes'),
    by=['plan'],
    curve=ref('demo_membership_survival_by_plan')
) }}
