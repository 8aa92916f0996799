{{ spellcurve.survival_curve(ref('demo_part_spells'), by=['part']) }}
