{{ spellcurve.spells_from_durations(
    ref('reference_valve_seat_engines'),
    duration='duration',
    event='event',
    subject='engine'
) }}
