{{ spellcurve.spells_from_activity(
    ref('demo_joiner_loans'),
    subject='member_id',
    happened='lent_at',
    lapse_after=180,
    as_of=var('spellcurve_demo_as_of', '2026-07-01'),
    carry=['plan'],
    rows='faulty'
) }}
