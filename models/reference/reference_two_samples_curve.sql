{{ spellcurve.survival_curve(
    ref('reference_two_samples_spells'),
    by=['sample_name']
) }}
