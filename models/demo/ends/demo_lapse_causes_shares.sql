{{ spellcurve.incidence_at(ref('demo_lapse_causes'), durations=[30, 90, 365, 730], by=['plan']) }}
