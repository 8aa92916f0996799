{{ spellcurve.cumulative_incidence(ref('membership_spells'), by=['plan']) }}
