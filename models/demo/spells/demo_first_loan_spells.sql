{{ spellcurve.spells_to_first_event(
    ref('demo_joiners'),
    ref('demo_joiner_loans'),
    subject='member_id',
    origin_at='joined_on',
    event_at='lent_at',
    cause='tool_kind',
    as_of=var('spellcurve_demo_as_of', '2026-07-01'),
    carry=['plan'],
    source_rows=true
) }}
