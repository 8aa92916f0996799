{{ spellcurve.spells_from_durations(
    ref('reference_melanoma'),
    duration='duration',
    event='event',
    subject='patient',
    cause='cause',
    carry=['ulceration']
) }}
