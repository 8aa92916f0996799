{{ spellcurve.actuarial_table(ref('demo_part_spells'), by=['part'], width=100) }}
