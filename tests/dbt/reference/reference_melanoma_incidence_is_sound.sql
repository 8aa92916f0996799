{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_incidence_is_sound(
    ref('reference_melanoma_incidence'),
    curve=ref('reference_melanoma_curve')
) }}
