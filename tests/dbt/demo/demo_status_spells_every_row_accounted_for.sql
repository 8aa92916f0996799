{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_every_row_accounted_for(
    ref('demo_status_spells'),
    sources=[ref('demo_status_changes')],
    faulty=ref('demo_status_spells_faulty')
) }}
