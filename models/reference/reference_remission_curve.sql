{{ spellcurve.survival_curve(
    ref('reference_remission_spells'),
    by=['arm']
) }}
