{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('reference_lung_cancer_overall_curve'),
    spells=ref('reference_lung_cancer_spells')
) }}
