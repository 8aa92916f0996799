{{ spellcurve.incidence_gray_test(
    ref('reference_melanoma_spells'),
    between='ulceration',
    causes='melanoma',
    most_groups=2
) }}
