{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_every_row_accounted_for(
    ref('demo_part_spells'),
    sources=[ref('demo_machine_parts')],
    faulty=ref('demo_part_spells_faulty')
) }}
