{{ spellcurve.survival_curve(ref('demo_desk_spells')) }}
