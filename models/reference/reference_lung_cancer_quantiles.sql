{{ spellcurve.survival_quantiles(
    ref('reference_lung_cancer_curve'),
    shares=[0.5],
    by=['sex']
) }}
