{{ spellcurve.survival_quantiles(
    ref('reference_maintenance_curve'),
    shares=[0.5],
    by=['arm']
) }}
