{{ spellcurve.survival_at(ref('demo_membership_survival_by_plan'), durations=[7, 30, 90, 180, 365, 730], by=['plan']) }}
