{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('demo_roll_survival'),
    spells=ref('demo_roll_spells')
) }}
