{{ spellcurve.survival_curve(ref('demo_roll_spells'), interval_scale='log') }}
