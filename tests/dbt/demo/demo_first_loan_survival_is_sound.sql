{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('demo_first_loan_survival'),
    by=['plan'],
    spells=ref('demo_first_loan_spells')
) }}
