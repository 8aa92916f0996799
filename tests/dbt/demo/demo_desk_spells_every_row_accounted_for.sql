{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_every_row_accounted_for(
    ref('demo_desk_spells'),
    sources=[ref('demo_desk_log')],
    faulty=ref('demo_desk_spells_faulty')
) }}
