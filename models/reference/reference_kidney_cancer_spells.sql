{{ spellcurve.spells_from_durations(
    ref('reference_kidney_cancer'),
    duration='completed_years',
    event='event',
    weight='patients'
) }}
