-- A curve of part of the spells: the rows are chosen in a CTE, and the curve reads the CTE by its name.
with returning_members as (

    select
        plan,
        entry,
        duration,
        event,
        weight
    from {{ ref('membership_spells') }}
    where spell_number > 1

),

curve as (

    {{ spellcurve.survival_curve('returning_members', interval_scale='log') }}

)

select
    duration,
    at_risk,
    events,
    survival,
    survival_lower,
    survival_upper
from curve
