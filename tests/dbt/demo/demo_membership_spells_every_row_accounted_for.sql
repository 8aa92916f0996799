{{ config(enabled=var('spellcurve_demo', false) | string | lower == 'true') }}

{{ spellcurve.test_every_row_accounted_for(
    ref('demo_membership_spells'),
    sources=[ref('demo_memberships')],
    faulty=ref('demo_membership_spells_faulty')
) }}
