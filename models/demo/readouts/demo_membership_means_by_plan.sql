{{ spellcurve.restricted_mean(ref('demo_membership_survival_by_plan'), horizon=365, by=['plan']) }}
