{{ spellcurve.mean_cumulative_count(
    ref('reference_valve_seats_spells'),
    ref('reference_valve_seat_replacements'),
    subject='engine',
    happened='replaced_at',
    happened_as='tenure'
) }}
