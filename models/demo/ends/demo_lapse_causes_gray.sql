{{ spellcurve.incidence_gray_test(
    ref('demo_membership_spells_by_ending'),
    between='plan',
    causes='this one',
    by=['ending'],
    most_groups=2
) }}
