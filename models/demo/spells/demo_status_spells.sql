{{ spellcurve.spells_from_status_history(
    ref('demo_status_changes'),
    subject='member_id',
    effective='effective_on',
    status='status',
    active=['active', 'paused'],
    cause='reason',
    sequence='change_number',
    as_of=var('spellcurve_demo_as_of', '2026-07-01'),
    source_rows=true
) }}
