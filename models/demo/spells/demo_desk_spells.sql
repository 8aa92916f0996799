{{ spellcurve.spells_from_event_log(
    ref('demo_desk_log'),
    subject='member_id',
    happened='logged_at',
    kind='kind',
    opens=['joined', 'rejoined'],
    closes={'moved away': 'moved', 'too dear': 'cost', 'not using it': 'unused', 'left': 'other'},
    grace=30,
    as_of=var('spellcurve_demo_as_of', '2026-07-01'),
    unit='month',
    source_rows=true
) }}
