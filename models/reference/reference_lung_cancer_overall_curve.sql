{{ spellcurve.survival_curve(
    ref('reference_lung_cancer_spells'),
    interval_scale='log',
    grid='every'
) }}
