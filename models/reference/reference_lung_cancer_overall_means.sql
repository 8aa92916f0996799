{{ spellcurve.restricted_mean(
    ref('reference_lung_cancer_overall_curve'),
    horizon=1022
) }}
