{{ spellcurve.hazard_by_band(ref('demo_membership_spells'), by=['plan'], width=30, horizon=720) }}
