{{ spellcurve.cumulative_incidence(ref('demo_membership_spells'), by=['plan']) }}
