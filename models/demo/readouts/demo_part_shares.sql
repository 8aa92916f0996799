{{ spellcurve.survival_at(ref('demo_part_survival'), durations=[100, 500, 1000], by=['part']) }}
