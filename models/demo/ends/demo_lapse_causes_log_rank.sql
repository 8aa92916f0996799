{{ spellcurve.incidence_log_rank_test(
    ref('demo_membership_spells_by_ending'),
    between='plan',
    causes='this one',
    pairs='all',
    by=['ending'],
    most_groups=2
) }}
