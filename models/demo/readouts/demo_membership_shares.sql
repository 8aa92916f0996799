{{ spellcurve.survival_at(ref('demo_membership_survival'), durations=[7, 30, 90, 180, 365, 730]) }}
