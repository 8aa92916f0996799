select
    subject_id,
    spell_number,
    started_at,
    last_seen_at,
    entry,
    duration,
    event,
    cause,
    weight,
    plan
from {{ ref('demo_membership_spells') }}
where entry = 0
