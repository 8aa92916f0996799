{{ spellcurve.survival_curve(
    ref('machine_spells'),
    by=['kind'],
    confidence=0.9,
    grid='every',
    horizon=80
) }}
