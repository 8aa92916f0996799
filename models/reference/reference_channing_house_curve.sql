{{ spellcurve.survival_curve(
    ref('reference_channing_house_spells'),
    by=['sex']
) }}
