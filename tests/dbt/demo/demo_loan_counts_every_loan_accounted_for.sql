{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

with counted as (

    select sum(events) as loans
    from {{ ref('demo_loan_counts') }}

),

refused as (

    select count(*) as loans
    from {{ ref('demo_loan_counts_faulty') }}

),

given as (

    select count(*) as loans
    from {{ ref('demo_loans') }}

)

select
    counted.loans as counted_loans,
    refused.loans as refused_loans,
    given.loans as given_loans
from counted
cross join refused
cross join given
where counted.loans + refused.loans <> given.loans
