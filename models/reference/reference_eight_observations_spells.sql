{{ spellcurve.spells_from_durations(
    ref('reference_eight_observations'),
    duration='duration',
    event='event',
    subject='item'
) }}
