{{ spellcurve.survival_quantiles(
    ref('reference_fly_lifetimes_overall_curve'),
    shares=[0.5]
) }}
