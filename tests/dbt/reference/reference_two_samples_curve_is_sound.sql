{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('reference_two_samples_curve'),
    by=['sample_name'],
    spells=ref('reference_two_samples_spells')
) }}
