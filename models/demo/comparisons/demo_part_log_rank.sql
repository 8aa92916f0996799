{{ spellcurve.log_rank_test(ref('demo_part_spells'), between='part', pairs='all', most_groups=3) }}
