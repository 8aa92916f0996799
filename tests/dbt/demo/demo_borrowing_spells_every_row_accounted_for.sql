{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_every_row_accounted_for(
    ref('demo_borrowing_spells'),
    sources=[ref('demo_joiner_loans')],
    faulty=ref('demo_borrowing_spells_faulty')
) }}
