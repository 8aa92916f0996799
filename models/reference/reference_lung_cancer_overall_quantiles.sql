{{ spellcurve.survival_quantiles(
    ref('reference_lung_cancer_overall_curve'),
    shares=[0.5]
) }}
