{{ spellcurve.survival_curve(
    ref('reference_eight_observations_spells')
) }}
