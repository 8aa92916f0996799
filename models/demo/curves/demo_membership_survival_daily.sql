{{ spellcurve.survival_curve(
    ref('demo_membership_spells'),
    by=['plan'],
    grid='every',
    horizon=1095,
    minimum_at_risk=20
) }}
