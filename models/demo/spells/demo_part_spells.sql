{{ spellcurve.spells_from_durations(
    ref('demo_machine_parts'),
    duration='hours_run',
    event='worn_out',
    subject='part_id',
    entry='hours_before_meter',
    unit='hour',
    carry=['part'],
    source_rows=true
) }}
