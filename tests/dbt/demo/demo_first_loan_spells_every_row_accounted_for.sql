{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_every_row_accounted_for(
    ref('demo_first_loan_spells'),
    sources=[ref('demo_joiners'), ref('demo_joiner_loans')],
    faulty=ref('demo_first_loan_spells_faulty')
) }}
