{{ spellcurve.survival_curve(ref('demo_first_loan_spells'), by=['plan']) }}
