{{ spellcurve.survival_quantiles(ref('demo_membership_survival'), shares=[0.25, 0.5, 0.75]) }}
