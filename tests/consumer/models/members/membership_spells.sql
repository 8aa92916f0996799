{{ spellcurve.spells_from_intervals(
    ref('stg_memberships'),
    subject='member_id',
    started='joined_on',
    ended='left_on',
    cause='left_because',
    grace=14,
    as_of='2024-07-01',
    observe_from='2020-01-01',
    carry=['plan'],
    source_rows=true
) }}
