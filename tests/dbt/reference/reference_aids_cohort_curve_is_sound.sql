{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('reference_aids_cohort_curve'),
    spells=ref('reference_aids_cohort_spells')
) }}
