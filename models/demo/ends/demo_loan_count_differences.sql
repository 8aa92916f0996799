{{ spellcurve.difference_in_mean_count(
    ref('demo_loan_counts'),
    between='plan',
    durations=[30, 90, 365, 730],
    reference='individual'
) }}
