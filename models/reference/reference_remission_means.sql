{{ spellcurve.restricted_mean(
    ref('reference_remission_curve'),
    horizon=23,
    by=['arm']
) }}
