{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('reference_two_samples_overall_curve'),
    spells=ref('reference_two_samples_spells')
) }}
