{{ spellcurve.spells_from_durations(
    ref('reference_remission'),
    duration='duration',
    event='event',
    unit='week',
    subject='patient',
    carry=['arm']
) }}
