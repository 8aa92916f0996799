{{ spellcurve.log_rank_test(
    ref('reference_lung_cancer_spells'),
    between='sex',
    pairs='all',
    most_groups=2
) }}
