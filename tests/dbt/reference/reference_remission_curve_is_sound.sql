{{ config(enabled=var('spellcurve_reference', false) | string | lower == 'true') }}

{{ spellcurve.test_curve_is_sound(
    ref('reference_remission_curve'),
    by=['arm'],
    spells=ref('reference_remission_spells')
) }}
