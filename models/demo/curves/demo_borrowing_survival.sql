{{ spellcurve.survival_curve(ref('demo_borrowing_spells'), by=['plan'], interval_scale='arcsine') }}
