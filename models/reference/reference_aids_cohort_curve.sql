{{ spellcurve.survival_curve(
    ref('reference_aids_cohort_spells')
) }}
