{{ spellcurve.time_to_events_needed(ref('demo_membership_spells'), hazard_ratio=0.8, by=['plan']) }}
