{{ spellcurve.incidence_stacked(ref('demo_lapse_causes'), by=['plan'], rest='still a member') }}
