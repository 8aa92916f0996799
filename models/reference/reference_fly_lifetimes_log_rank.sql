{{ spellcurve.log_rank_test(
    ref('reference_fly_lifetimes_spells'),
    between='strain',
    pairs='all',
    most_groups=2
) }}
