{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('reference_fly_lifetimes_overall_curve'),
    spells=ref('reference_fly_lifetimes_spells')
) }}
