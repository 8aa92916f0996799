{{ spellcurve.spells_from_durations(
    ref('reference_lung_cancer'),
    duration='duration',
    event='event',
    subject='patient',
    carry=['sex']
) }}
