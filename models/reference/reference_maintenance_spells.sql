{{ spellcurve.spells_from_durations(
    ref('reference_maintenance'),
    duration='duration',
    event='event',
    unit='week',
    subject='patient',
    carry=['arm']
) }}
