{{ spellcurve.spells_from_durations(
    ref('reference_channing_house'),
    duration='duration',
    event='event',
    unit='month',
    subject='resident',
    entry='entry',
    carry=['sex']
) }}
