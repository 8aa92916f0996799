{{ spellcurve.cohort_readout(
    ref('demo_watched_membership_spells'),
    cohort='started_at',
    durations=[30, 90, 180, 365, 730, 1095],
    period='quarter'
) }}
