{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_every_row_accounted_for(
    ref('demo_roll_spells'),
    sources=[ref('demo_sunday_roll')],
    faulty=ref('demo_roll_spells_faulty')
) }}
