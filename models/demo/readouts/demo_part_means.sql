{{ spellcurve.restricted_mean(ref('demo_part_survival'), horizon=1000, by=['part']) }}
