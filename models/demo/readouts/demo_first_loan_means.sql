{{ spellcurve.restricted_mean(ref('demo_first_loan_survival'), horizon=365, by=['plan']) }}
