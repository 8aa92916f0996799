{{ spellcurve.spells_from_durations(
    ref('reference_diesel_fans'),
    duration='duration',
    event='event',
    unit='hour',
    weight='fans'
) }}
