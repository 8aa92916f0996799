{{ spellcurve.state_shares(
    ref('demo_joiner_states'),
    subject='member_id',
    effective='effective_on',
    status='status',
    states=['active', 'paused', 'lapsed'],
    origin='joined_on',
    sequence='change_number',
    by=['plan'],
    as_of=var('spellcurve_demo_as_of', '2026-07-01')
) }}
