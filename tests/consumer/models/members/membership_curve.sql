{{ spellcurve.survival_curve(ref('membership_spells'), by=['plan']) }}
