{{ spellcurve.survival_beyond(ref('demo_membership_survival_by_plan'), survived=[90, 365], by=['plan']) }}
