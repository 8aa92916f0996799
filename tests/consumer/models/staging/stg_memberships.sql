select
    member_id,
    plan,
    joined_on,
    left_on,
    left_because
from {{ ref('memberships') }}
