{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('demo_membership_survival_daily'),
    by=['plan'],
    spells=ref('demo_membership_spells'),
    horizon=1095
) }}
