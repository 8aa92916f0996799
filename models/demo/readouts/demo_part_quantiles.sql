{{ spellcurve.survival_quantiles(ref('demo_part_survival'), shares=[0.5], by=['part']) }}
