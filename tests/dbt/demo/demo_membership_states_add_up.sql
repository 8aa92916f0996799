{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

select
    plan,
    duration,
    sum(share) as all_states,
    count(*) as states
from {{ ref('demo_membership_states') }}
group by plan, duration
having abs(sum(share) - 1) > 1e-9 or count(*) <> 3
