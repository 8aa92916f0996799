{{ spellcurve.spells_from_status_history(
    ref('demo_sunday_roll'),
    subject='member_id',
    effective='sheet_on',
    status='status',
    active='member',
    grace=7,
    shape='snapshots',
    as_of=var('spellcurve_demo_as_of', '2026-07-01'),
    unit='week',
    rows='faulty'
) }}
