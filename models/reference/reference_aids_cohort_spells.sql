{{ spellcurve.spells_from_durations(
    ref('reference_aids_cohort'),
    duration='duration',
    event='event',
    subject='participant',
    entry='entry'
) }}
