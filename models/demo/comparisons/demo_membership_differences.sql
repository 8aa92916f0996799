{{ spellcurve.difference_at(
    ref('demo_membership_survival_by_plan'), between='plan', durations=[30, 90, 365, 730], reference='individual'
) }}
