{{ spellcurve.survival_curve(
    ref('reference_fly_lifetimes_spells'),
    by=['strain']
) }}
