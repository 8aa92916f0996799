{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

select
    plan,
    duration,
    sum(share) as all_parts,
    count(*) as parts
from {{ ref('demo_lapse_causes_stacked') }}
group by plan, duration
having abs(sum(share) - 1) > 1e-9 or count(*) <> 5
