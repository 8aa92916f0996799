{{ spellcurve.survival_curve(
    ref('reference_melanoma_spells')
) }}
