-- A loan without a member stays in: the builder refuses it, and says so.
with records as (

    select
        member_id,
        plan,
        from_paper
    from {{ ref('demo_members') }}

)

select
    loans.member_id,
    records.plan,
    loans.lent_at,
    loans.tool_kind
from {{ ref('demo_loans') }} as loans
left join records
    on records.member_id = loans.member_id
where records.from_paper is null or records.from_paper = 'no'
