{{ spellcurve.restricted_mean(
    ref('reference_maintenance_curve'),
    horizon=161,
    by=['arm']
) }}
