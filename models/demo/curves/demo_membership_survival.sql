{{ spellcurve.survival_curve(ref('demo_membership_spells')) }}
