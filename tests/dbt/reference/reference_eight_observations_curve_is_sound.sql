{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('reference_eight_observations_curve'),
    spells=ref('reference_eight_observations_spells')
) }}
