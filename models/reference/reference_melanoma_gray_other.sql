{{ spellcurve.incidence_gray_test(
    ref('reference_melanoma_spells'),
    between='ulceration',
    causes='other',
    most_groups=2
) }}
