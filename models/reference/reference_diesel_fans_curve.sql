{{ spellcurve.survival_curve(
    ref('reference_diesel_fans_spells')
) }}
