{{ spellcurve.cumulative_incidence(
    ref('reference_melanoma_spells')
) }}
