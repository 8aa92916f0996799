{{ spellcurve.survival_quantiles(
    ref('reference_remission_curve'),
    shares=[0.5],
    by=['arm']
) }}
