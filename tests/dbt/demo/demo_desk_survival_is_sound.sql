{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('demo_desk_survival'),
    spells=ref('demo_desk_spells')
) }}
