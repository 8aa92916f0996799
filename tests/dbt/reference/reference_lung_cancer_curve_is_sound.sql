{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('reference_lung_cancer_curve'),
    by=['sex'],
    spells=ref('reference_lung_cancer_spells')
) }}
