{{ spellcurve.survival_quantiles(ref('demo_membership_survival_by_plan'), shares=[0.25, 0.5, 0.75], by=['plan']) }}
