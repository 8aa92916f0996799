-- A change without a member stays in: state_shares refuses it, and says so.
with records as (

    select
        member_id,
        plan,
        joined_on,
        from_paper
    from {{ ref('demo_members') }}

)

select
    changes.member_id,
    records.plan,
    records.joined_on,
    changes.change_number,
    changes.effective_on,
    changes.status
from {{ ref('demo_status_changes') }} as changes
left join records
    on records.member_id = changes.member_id
where records.from_paper is null or records.from_paper = 'no'
