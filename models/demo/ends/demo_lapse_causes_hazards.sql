{{ spellcurve.incidence_hazards(ref('demo_lapse_causes'), by=['plan']) }}
