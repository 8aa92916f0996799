{{ spellcurve.survival_curve(
    ref('reference_lung_cancer_spells'),
    by=['sex'],
    interval_scale='log'
) }}
