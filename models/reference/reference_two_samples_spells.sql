{{ spellcurve.spells_from_durations(
    ref('reference_two_samples'),
    duration='duration',
    event='event',
    weight='weight',
    carry=['sample_name']
) }}
