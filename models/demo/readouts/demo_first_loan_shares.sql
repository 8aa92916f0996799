{{ spellcurve.survival_at(ref('demo_first_loan_survival'), durations=[7, 30, 365], by=['plan']) }}
