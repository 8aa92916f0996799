{{ spellcurve.log_rank_test(
    ref('reference_remission_spells'),
    between='arm',
    weighting='gehan',
    most_groups=2
) }}
