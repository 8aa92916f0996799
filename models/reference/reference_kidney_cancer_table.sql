{{ spellcurve.actuarial_table(
    ref('reference_kidney_cancer_spells'),
    width=1,
    horizon=5
) }}
