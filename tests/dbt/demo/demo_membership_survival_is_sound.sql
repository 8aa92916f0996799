{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('demo_membership_survival'),
    spells=ref('demo_membership_spells')
) }}
