{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('reference_diesel_fans_curve'),
    spells=ref('reference_diesel_fans_spells')
) }}
