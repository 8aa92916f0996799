{{ spellcurve.survival_curve(ref('demo_status_spells'), interval_scale='logit') }}
