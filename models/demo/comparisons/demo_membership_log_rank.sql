{{ spellcurve.log_rank_test(ref('demo_membership_spells'), between='plan', pairs='all', most_groups=2) }}
