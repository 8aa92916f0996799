{{ spellcurve.survival_quantiles(ref('demo_first_loan_survival'), shares=[0.25, 0.5, 0.75], by=['plan']) }}
