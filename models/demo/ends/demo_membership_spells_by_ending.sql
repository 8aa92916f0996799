-- Each membership once for each cause, which then is the one looked at: so one call tests all of them.
with endings as (

    select 'cost' as ending
    union all
    select 'moved' as ending
    union all
    select 'other' as ending
    union all
    select 'unused' as ending

)

select
    endings.ending,
    spells.plan,
    spells.entry,
    spells.duration,
    spells.event,
    case
        when spells.cause = endings.ending then 'this one'
        when spells.event = 1 then 'another'
    end as cause,
    spells.weight
from {{ ref('demo_membership_spells') }} as spells
cross join endings
