{{ spellcurve.log_rank_test(
    ref('reference_maintenance_spells'),
    between='arm',
    pairs='all',
    most_groups=2
) }}
