{{ spellcurve.survival_curve(
    ref('reference_maintenance_spells'),
    by=['arm'],
    interval_scale='log'
) }}
