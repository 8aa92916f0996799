{{ spellcurve.spells_from_durations(
    ref('workshop_machines'),
    duration='hours',
    event='worn_out',
    subject='machine_id',
    weight='machines',
    unit='hour',
    carry=['kind']
) }}
