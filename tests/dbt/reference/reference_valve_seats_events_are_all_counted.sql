{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{# Replacements that count nowhere: there must be none. #}
{{ spellcurve.mean_cumulative_count(
    ref('reference_valve_seats_spells'),
    ref('reference_valve_seat_replacements'),
    subject='engine',
    happened='replaced_at',
    happened_as='tenure',
    rows='faulty'
) }}
