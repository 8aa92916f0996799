select
    member_id,
    plan,
    joined_on
from {{ ref('demo_members') }}
where from_paper = 'no'
