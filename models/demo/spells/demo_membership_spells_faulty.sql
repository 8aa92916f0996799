{{ spellcurve.spells_from_intervals(
    ref('demo_memberships'),
    subject='member_id',
    started='started_on',
    ended='ended_on',
    cause='end_reason',
    grace=30,
    as_of=var('spellcurve_demo_as_of', '2026-07-01'),
    observe_from='2020-07-01',
    recorded_at='recorded_at',
    carry=['plan'],
    rows='faulty'
) }}
