{{ spellcurve.mean_cumulative_count(
    ref('demo_membership_spells'),
    ref('demo_loans'),
    subject='member_id',
    happened='lent_at',
    rows='faulty'
) }}
