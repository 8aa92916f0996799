{{ spellcurve.difference_in_restricted_mean(
    ref('demo_membership_survival_by_plan'), between='plan', horizon=365, reference='individual'
) }}
