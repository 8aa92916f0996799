{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('reference_melanoma_curve'),
    spells=ref('reference_melanoma_spells')
) }}
