{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('reference_channing_house_curve'),
    by=['sex'],
    spells=ref('reference_channing_house_spells')
) }}
