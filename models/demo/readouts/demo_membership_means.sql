{{ spellcurve.restricted_mean(ref('demo_membership_survival'), horizon=365) }}
