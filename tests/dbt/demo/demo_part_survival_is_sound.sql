{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('demo_part_survival'),
    by=['part'],
    spells=ref('demo_part_spells')
) }}
