{{ spellcurve.spells_from_durations(
    ref('reference_fly_lifetimes'),
    duration='duration',
    event='event',
    subject='fly',
    carry=['strain']
) }}
