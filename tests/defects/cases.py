"""A small dbt project on tables with everything that a wrong macro could stumble over, and nothing more.

MODELS maps a model's name to the macro call that it is made of.
"""

from __future__ import annotations

from datetime import date, timedelta
from typing import Any

from corpus import Table

FIRST_DAY = date(2024, 1, 1)


def _spells(listed: dict[str | None, list[tuple]]) -> list[dict[str, Any]]:
    """Rows of (entry, duration, event, cause, weight), by group; dates and branches follow from the place in the list."""
    rows = []
    for group, own in listed.items():
        for entry, duration, event, cause, weight in own:
            place = len(rows)
            started = FIRST_DAY + timedelta(days=9 * place % 100)
            rows.append(
                {
                    "subject_id": f"m{place}",
                    "plan": group,
                    "branch": [None, "north", "south"][place % 3],
                    "stage": {"household": 1, "individual": 2}.get(group or "", 4),
                    "started_at": started,
                    "last_seen_at": started + timedelta(days=duration),
                    "entry": entry,
                    "duration": duration,
                    "event": event,
                    "cause": cause,
                    "weight": weight,
                }
            )
    return rows


SPELLS = {
    "subject_id": "text",
    "plan": "text",
    "branch": "text",
    "stage": "bigint",
    "started_at": "date",
    "last_seen_at": "date",
    "entry": "bigint",
    "duration": "bigint",
    "event": "bigint",
    "cause": "text",
    "weight": "bigint",
}
# Ties, late entry (also at the duration, where nobody is at risk, and at one where others end), durations of 0, a null
# group, weights, a group without events, and one whose curve reaches 0.
STAYS = {
    "household": [
        (0, 0, 1, "moved", 1),
        (0, 0, 0, None, 1),
        (0, 3, 1, "moved", 2),
        (0, 3, 0, None, 1),
        (0, 3, 1, "lapsed", 1),
        (2, 5, 1, "lapsed", 1),
        (3, 5, 0, None, 1),
        (0, 5, 1, "moved", 1),
        (0, 8, 0, None, 2),
        (5, 9, 1, None, 1),
        (7, 7, 1, "moved", 1),
        (0, 12, 1, "moved", 1),
        (0, 15, 0, None, 3),
    ],
    "individual": [
        (0, 1, 1, "moved", 1),
        (0, 2, 0, None, 1),
        (0, 2, 1, "lapsed", 1),
        (0, 4, 1, "moved", 2),
        (1, 6, 1, "lapsed", 1),
        (0, 6, 1, "moved", 1),
    ],
    None: [
        (0, 2, 1, "moved", 1),
        (0, 4, 0, None, 1),
        (0, 4, 1, "moved", 1),
        (3, 9, 1, "moved", 1),
        (0, 11, 0, None, 1),
        (0, 0, 0, None, 1),
    ],
    "trial": [(0, 2, 0, None, 1), (0, 7, 0, None, 2)],
}
# A curve that reaches 0 before others enter, one of which hardly anything is left, and a group nobody of which was ever at risk.
ENDINGS = {
    "early": [(0, 2, 1, "moved", 2), (0, 1, 0, None, 1), (3, 6, 1, "lapsed", 1), (3, 8, 0, None, 2)],
    "almost": [(0, 1, 1, "moved", 1000), (0, 2, 1, "lapsed", 1), (0, 3, 1, "moved", 500), (0, 4, 0, None, 1)],
    "unseen": [(4, 4, 1, "moved", 1)],
}
# Very many spells, of which very few end: what 32 bits, or a series cut short, cannot hold.
CROWD = {
    "crowd": [
        (0, 1, 1, "moved", 3),
        (0, 2, 0, None, 70_000_001),
        (0, 4, 1, "lapsed", 600_000),
        (3, 5, 1, "moved", 7),
        (0, 9, 0, None, 30_000_000),
    ]
}


def _levels() -> list[dict[str, Any]]:
    """Curves whose product meets 1/2 and 1/10 exactly, in several steps, so that logarithms may land a hair above."""
    listed: dict[str | None, list[tuple]] = {}
    for many, left, steps in [
        (6, 3, 3),
        (10, 5, 3),
        (14, 7, 2),
        (20, 2, 3),
        (30, 3, 5),
        (22, 11, 5),
        (40, 4, 5),
    ]:
        lost = [(many - left) // steps + (step < (many - left) % steps) for step in range(steps)]
        own = [(0, 2 + step, 1, "moved", weight) for step, weight in enumerate(lost)]
        listed[f"{many} to {left}"] = [*own, (0, 30, 0, None, left)]
    return _spells(listed)


def _table(columns: dict[str, str], rows: list[tuple]) -> Table:
    return Table(columns, [dict(zip(columns, row, strict=True)) for row in rows])


# Subjects with several spells, two without a subject; loans of theirs, on the first and the last day, several on one
# day, before and after observation, between two spells, of nobody known.
WATCHED = _table(
    SPELLS,
    [
        ("ann", "household", "north", 1, date(2024, 1, 1), date(2024, 1, 9), 0, 8, 1, "moved", 1),
        ("ann", "household", "north", 1, date(2024, 2, 1), date(2024, 2, 6), 0, 5, 0, None, 1),
        ("bob", "household", "south", 1, date(2024, 1, 3), date(2024, 1, 13), 4, 10, 0, None, 1),
        ("cat", "household", None, 1, date(2024, 1, 5), date(2024, 1, 8), 0, 3, 1, "moved", 1),
        ("dan", None, "north", 2, date(2024, 1, 1), date(2024, 1, 7), 0, 6, 0, None, 1),
        ("eve", None, "north", 2, date(2024, 1, 2), date(2024, 1, 14), 2, 12, 1, "lapsed", 1),
        ("fay", None, "north", 2, date(2024, 1, 2), date(2024, 1, 2), 0, 0, 1, "lapsed", 1),
        ("gus", "trial", "north", 4, date(2024, 1, 2), date(2024, 1, 20), 0, 18, 0, None, 2),
        ("hal", "trial", "north", 4, date(2024, 1, 2), date(2024, 1, 12), 0, 10, 0, None, 1),
        (None, "trial", "north", 4, date(2024, 1, 2), date(2024, 1, 12), 0, 10, 0, None, 1),
        (None, "trial", "north", 4, date(2024, 1, 2), date(2024, 1, 22), 0, 20, 0, None, 1),
    ],
)
LOANS = _table(
    {"who": "text", "at": "text", "age": "text"},
    [
        ("ann", "2024-01-01", "0"),
        ("ann", "2024-01-04 17:00", "3"),
        ("ann", "2024-01-04 18:00", "3"),
        ("ann", "2024-01-09", "8"),
        ("ann", "2024-01-20", "19"),
        ("ann", "2024-02-03", "2"),
        ("bob", "2024-01-06", "3"),
        ("bob", "2024-01-07", "4"),
        ("bob", "2024-01-08", "5"),
        ("bob", "2024-01-13", "10"),
        ("cat", "2024-01-08", "3"),
        ("cat", "2024-01-09", "4"),
        ("dan", "2024-01-03", "2"),
        ("dan", "2024-01-07", "6"),
        ("eve", "2024-01-10", "8"),
        ("eve", "2024-01-14", "12"),
        ("fay", "2024-01-02", "0"),
        ("gus", "2024-01-05", "3"),
        ("gus", "2024-01-15", "13"),
        ("hal", "2024-01-05", "3"),
        ("zoe", "2024-01-05", "3"),
        (None, "2024-01-05", "3"),
        ("ann", None, None),
        ("bob", "soon", "2.5"),
        ("bob", "2024-02-30", "-1"),
    ],
)

# Two plans, one null: late entry, moves at the same duration, a state left and entered on one day, statuses unknown.
HISTORY = _table(
    {"who": "text", "since": "text", "state": "text", "nr": "bigint", "joined": "text", "plan": "text"},
    [
        ("ann", "2024-01-01", "trial", 1, "2024-01-01", "household"),
        ("ann", "2024-01-06", "active", 2, "2024-01-01", "household"),
        ("ann", "2024-01-16", "lapsed", 3, "2024-01-01", "household"),
        ("bob", "2024-01-02", "trial", 1, "2024-01-02", "household"),
        ("bob", "2024-01-07", "active", 2, "2024-01-02", "household"),
        ("bob", "2024-01-07", "paused", 3, "2024-01-02", "household"),
        ("bob", "2024-01-20", "active", 4, "2024-01-02", "household"),
        ("cat", "2023-12-20", "trial", 1, "2023-12-15", "household"),
        ("cat", "2024-01-09", "active", 2, "2023-12-15", "household"),
        ("dan", "2024-01-03", "active", 1, "2024-01-03", "household"),
        ("eve", "2024-01-01", "trial", 1, "2024-01-01", None),
        ("eve", "2024-01-05", "lapsed", 2, "2024-01-01", None),
        ("fay", "2024-01-04", "trial", 1, "2024-01-04", None),
        ("fay", "2024-01-14", "active", 2, "2024-01-04", "household"),
        ("gus", "2024-01-04", "active", 1, "2024-01-04", None),
        ("hal", "2024-01-05", "?", 1, "2024-01-01", None),
        ("ida", "soon", "trial", 1, "2024-01-01", None),
        ("jon", None, "trial", 1, "2024-01-01", None),
        ("kim", "2024-01-05", None, 1, "2024-01-01", None),
        ("lou", "2024-03-05", "trial", 1, "2024-01-01", None),
        ("mia", "2024-01-01", "trial", 1, "2024-01-02", None),
        ("ned", "2024-01-08", "trial", 1, None, None),
        ("ola", "2024-01-08", "trial", 1, "?", None),
        ("pat", "2024-01-08", "trial", 1, "2024-01-08", None),
        ("pat", "2024-01-08", "active", 1, "2024-01-08", None),
        (None, "2024-01-08", "active", 1, "2024-01-08", None),
    ],
)

# The builders' sources keep everything as text, as untidy sources do. AS_OF falls inside them.
AS_OF = "2024-03-31"
MEMBERSHIPS = _table(
    {"member": "text", "joined": "text", "left_on": "text", "why": "text", "typed": "text", "plan": "text"},
    [
        ("ann", "2024-01-01", "2024-01-20", "moved", None, "a"),
        ("ann", "2024-01-20", "2024-02-01", "cost", None, "b"),
        ("ann", "2024-02-03", "2024-03-31", "cost", None, "c"),
        ("bob", "2024-01-05", "2024-01-20", None, None, "a"),
        ("bob", "2024-01-25", None, None, None, "b"),
        ("bob", "2024-01-25", None, None, None, "b"),
        ("cat", "2024-01-01", "2024-02-10", "moved", None, "a"),
        ("cat", "2024-01-15", "2024-01-20", "cost", None, "b"),
        ("cat", "2024-02-05", "2024-02-08", "cost", None, "c"),
        ("cat", "2024-02-12", "2024-02-20", "cost", None, "c"),
        ("dan", "2024-02-03 08:00", "2024-02-03 07:00", "moved", None, "a"),
        ("dan", "2024-02-05 08:00", "2024-02-06 07:59", "moved", None, "a"),
        ("eve", "2024-03-01", "2024-03-31", "moved", "2024-03-31", "a"),
        ("fay", "2024-03-01", "2024-03-31 12:00", "moved", "2024-03-30", "a"),
        ("gus", "2024-03-01", "2024-04-20", "moved", "2024-03-01", "a"),
        ("hal", "2024-03-31", None, None, None, "a"),
        ("ida", "2024-03-31 00:00:01", None, None, None, "a"),
        ("jon", None, "2024-02-01", "moved", None, "a"),
        ("kim", "soon", "2024-02-01", "moved", None, "a"),
        ("lea", "2024-02-01", "2024-02-30", "moved", None, "a"),
        ("mia", "2024-02-02", "2024-02-01", "moved", None, "a"),
        (None, "2024-02-02", "2024-02-10", "moved", None, "a"),
        ("ned", "2024-01-31", "2024-02-29", "moved", None, "a"),
        ("ned", "2024-01-31", "2024-02-29", "moved", None, "b"),
        ("ola", "2024-02-02", "2024-02-10", "moved", "2024-04-01", "a"),
        ("pat", None, "2024-02-10", "moved", "later", "a"),
        ("quinn", "2023-12-01", "2024-01-05", "moved", None, "a"),
        ("ria", "2023-12-10", "2024-01-15", "moved", None, "a"),
        ("sam", "2023-12-31", "2024-03-30", "moved", None, "a"),
        ("tom", "2023-12-20", "2024-01-14 09:00", "moved", None, "a"),
        ("uma", "2024-02-28", "2024-03-13", "cost", None, "a"),
        ("uma", "2024-03-15", "2024-03-28", "moved", None, "b"),
        ("vic", "2024-03-29", None, None, None, "a"),
    ],
)
LOG = _table(
    {"member": "text", "at": "text", "what": "text", "nr": "bigint", "plan": "text"},
    [
        ("ann", "2024-01-01", "join", 1, "a"),
        ("ann", "2024-01-20", "leave", 2, "b"),
        ("ann", "2024-01-23", "join", 3, "c"),
        ("ann", "2024-02-15", "lapse", 4, "d"),
        ("ann", "2024-02-19", "join", 5, "e"),
        ("bob", "2024-01-02", "join", 1, "a"),
        ("bob", "2024-01-09", "join", 2, "b"),
        ("bob", "2024-01-30", "leave", 3, "c"),
        ("cat", "2024-01-02", "leave", 1, "a"),
        ("cat", "2024-01-05", "join", 2, "b"),
        ("dan", "2024-01-01", "join", 1, "a"),
        ("dan", "2024-01-10", "leave", 2, "b"),
        ("dan", "2024-01-10", "join", 3, "c"),
        ("dan", "2024-01-29", "leave", 4, "d"),
        ("dan", "2024-02-10", "leave", 6, "e"),
        ("dan", "2024-02-10", "join", 5, "f"),
        ("eve", "2024-01-02", "join", 1, "a"),
        ("eve", "2024-01-02", "join", 1, "b"),
        ("eve", "2024-02-02", None, 2, "c"),
        ("eve", "2024-02-03", "chat", 3, "d"),
        ("eve", None, "leave", 4, "e"),
        ("eve", "soon", "leave", 5, "f"),
        ("eve", "2024-04-01", "leave", 6, "g"),
        (None, "2024-02-01", "leave", 6, "g"),
        ("kim", "2024-02-01", "join", 1, "a"),
        ("kim", "2024-03-28", "leave", 2, "b"),
        ("lou", "2024-02-01", "join", 1, "a"),
        ("lou", "2024-03-29", "leave", 2, "b"),
        ("mia", "2024-03-29", "join", 1, "a"),
        ("ned", "2024-02-01", "lapse", 2, "a"),
        ("ned", "2024-02-01", "join", 1, "b"),
        ("ola", "2024-02-01", "join", None, "a"),
        ("ola", "2024-02-01", "leave", 7, "b"),
        ("ola", "2024-03-01", "leave", 8, "c"),
    ],
)
STATUSES = _table(
    {"member": "text", "since": "text", "until": "text", "status": "text", "why": "text", "nr": "bigint"},
    [
        ("ann", "2024-01-01", None, "active", None, 1),
        ("ann", "2024-01-10", "2024-01-12", "active", None, 2),
        ("ann", "2024-01-20", None, "paused", "holiday", 3),
        ("ann", "2024-01-25", None, "active", None, 4),
        ("ann", "2024-02-10", None, "lapsed", "cost", 5),
        ("ann", "2024-02-16", None, "active", None, 6),
        ("bob", "2024-01-02", None, "paused", None, 1),
        ("bob", "2024-01-09", "2024-03-15", "active", None, 2),
        ("cat", "2024-01-02", None, "active", None, 2),
        ("cat", "2024-01-02", None, "lapsed", "moved", 1),
        ("cat", "2024-01-03", None, "active", None, 3),
        ("dan", "2024-01-02 08:30", None, "active", None, 1),
        ("dan", "2024-01-02 08:30", None, "active", None, 1),
        ("dan", "2024-01-09 07:45", None, "lapsed", "moved", 2),
        ("dan", "2024-01-09 07:45", None, "lapsed", "cost", 2),
        ("eve", "2024-01-02", None, None, None, 1),
        ("eve", None, None, "active", None, 1),
        ("eve", "soon", None, "active", None, 1),
        ("eve", "2024-04-02", None, "active", None, 1),
        ("eve", "2024-02-02", "never", "active", None, 1),
        ("eve", "2024-02-02", "2024-02-01", "active", None, 1),
        (None, "2024-02-02", "2024-02-01", "active", None, 1),
        ("fay", "2024-01-02", None, "active", None, None),
        ("fay", "2024-01-02", None, "lapsed", "moved", 1),
        ("fay", "2024-03-29", None, "lapsed", "cost", 2),
    ],
)
SNAPSHOTS = _table(
    {"member": "text", "day": "text", "status": "text", "why": "text"},
    [
        ("ann", "2024-03-01", "active", None),
        ("ann", "2024-03-02 09:00", "active", None),
        ("ann", "2024-03-03", "active", None),
        ("ann", "2024-03-05", "active", None),
        ("ann", "2024-03-09", "active", None),
        ("ann", "2024-03-10", "active", None),
        ("bob", "2024-03-01", "active", None),
        ("bob", "2024-03-02", "active", None),
        ("bob", "2024-03-03", "lapsed", "cost"),
        ("cat", "2024-03-04", "active", None),
        ("cat", "2024-03-05", "active", None),
        ("cat", "2024-03-09", "active", None),
        ("cat", "2024-03-09", "lapsed", None),
        ("dan", "2024-03-10", None, None),
        ("dan", "2024-04-10", "active", None),
        ("dan", "2024-03-10", "paused", None),
    ],
)
VISITS = _table(
    {"member": "text", "at": "text", "typed": "text"},
    [
        ("ann", "2024-01-01 09:00", None),
        ("ann", "2024-01-11 08:00", None),
        ("ann", "2024-01-20 23:00", None),
        ("ann", "2024-02-08", None),
        ("ann", "2024-02-08", None),
        ("bob", "2024-01-30", None),
        ("bob", "2024-02-15", "2024-04-01"),
        ("bob", "2024-03-21 15:00", None),
        ("cat", "2024-03-22", None),
        ("dan", "2023-12-01", None),
        ("dan", "2024-04-01", None),
        ("eve", None, None),
        ("eve", "soon", None),
        (None, "2024-02-01", None),
        ("fay", "2024-03-20", "2024-03-31"),
    ],
)
ORIGINS = _table(
    {"member": "text", "joined": "text", "typed": "text", "plan": "text"},
    [
        ("ann", "2024-01-01", None, "a"),
        ("ann", "2024-02-01", None, "b"),
        ("bob", "2024-01-05 10:00", None, "a"),
        ("cat", "2024-01-05", None, "a"),
        ("cat", "2024-01-05", None, "a"),
        ("dan", "2024-03-31", None, "a"),
        ("eve", "2024-04-01", None, "a"),
        ("fay", None, None, "a"),
        ("gus", "soon", None, "a"),
        (None, "2024-01-01", None, "a"),
        ("hal", "2024-01-01", "2024-04-01", "a"),
        ("ida", "2024-02-01", None, "a"),
    ],
)
FIRSTS = _table(
    {"member": "text", "at": "text", "what": "text", "typed": "text"},
    [
        ("ann", "2024-01-15", "saw", None),
        ("ann", "2024-01-10", "drill", None),
        ("ann", "2024-02-01", "lathe", None),
        ("bob", "2024-01-04", "drill", None),
        ("bob", "2024-01-05 10:00", None, None),
        ("bob", "2024-02-05", "drill", None),
        ("cat", "2024-03-31", "drill", None),
        ("dan", "2024-04-02", "drill", None),
        ("hal", "2024-01-09", "drill", None),
        ("ida", "2024-02-09", "drill", "2024-04-01"),
        ("ida", "2024-02-12", "drill", "2024-03-01"),
        ("ida", "2024-02-12", "awl", None),
        (None, "2024-02-12", "awl", None),
        ("ida", None, "awl", None),
        ("ida", "soon", "awl", None),
    ],
)
LENGTHS = _table(
    {
        "who": "text",
        "months": "text",
        "waited": "text",
        "left_it": "text",
        "why": "text",
        "stands_for": "text",
    },
    [
        ("ann", "3", None, "1", "cost", "1"),
        ("ann", "7", "3", "0", "cost", "2"),
        ("bob", "7.0", "7", "TRUE", None, "0.5"),
        ("cat", "0", "0", "false", None, "10"),
        ("dan", "12", "13", "1", "cost", "1"),
        ("eve", None, None, "1", "cost", "1"),
        ("eve", "2.5", None, "1", "cost", "1"),
        ("eve", "-1", None, "1", "cost", "1"),
        ("eve", "many", None, "1", "cost", "1"),
        ("eve", "5", "1.5", "1", "cost", "1"),
        ("eve", "5", "-1", "1", "cost", "1"),
        ("eve", "5", "some", "1", "cost", "1"),
        ("eve", "5", "1", None, "cost", "1"),
        ("eve", "5", "1", "2", "cost", "1"),
        ("eve", "5", "1", "1", "cost", None),
        ("eve", "5", "1", "1", "cost", "0"),
        ("eve", "5", "1", "1", "cost", "heavy"),
        (None, "5", "1", "1", "cost", "1"),
    ],
)

TABLES = {
    "stays": Table(SPELLS, _spells(STAYS)),
    "ending_stays": Table(SPELLS, _spells(ENDINGS)),
    "crowded_stays": Table(SPELLS, _spells(CROWD)),
    "level_stays": Table(SPELLS, _levels()),
    "watched_stays": WATCHED,
    "loans": LOANS,
    "history": HISTORY,
    "memberships": MEMBERSHIPS,
    "membership_log": LOG,
    "statuses": STATUSES,
    "snapshots": SNAPSHOTS,
    "visits": VISITS,
    "origins": ORIGINS,
    "firsts": FIRSTS,
    "lengths": LENGTHS,
}

BY = "by='plan'"
INTERVALS = (
    "spells_from_intervals('memberships', 'member', 'joined', 'left_on', cause='why', as_of='2024-03-31'"
)
OF_LOG = (
    "spells_from_event_log('membership_log', 'member', 'at', 'what', 'join', {'leave': 'left', 'lapse': 'lapsed'},"
    " as_of='2024-03-31'"
)
OF_STATUSES = (
    "spells_from_status_history('statuses', 'member', 'since', 'status', 'active', as_of='2024-03-31'"
)
OF_SNAPSHOTS = (
    "spells_from_status_history('snapshots', 'member', 'day', 'status', 'active', shape='snapshots', cause='why',"
    " as_of='2024-03-31'"
)
OF_VISITS = "spells_from_activity('visits', 'member', 'at', 10, as_of='2024-03-31', recorded_at='typed'"
TO_FIRST = (
    "spells_to_first_event('origins', 'firsts', 'member', 'joined', 'at', cause='what', as_of='2024-03-31',"
    " recorded_at='typed', carry='plan', source_rows=true"
)
OF_LENGTHS = "spells_from_durations('lengths', 'months', 'left_it', subject='who', entry='waited', cause='why', weight='stands_for'"
OF_HISTORY = "state_shares('history', 'who', 'since', 'state', ['trial', 'active', 'paused', 'lapsed'], by='plan', as_of='2024-02-10'"
OF_LOANS = "mean_cumulative_count('watched_stays', 'loans', 'who', 'at', by='plan'"

MODELS = {
    # spell tables
    "intervals": f"{INTERVALS}, recorded_at='typed', observe_from='2024-01-15', carry='plan', source_rows=true)",
    "intervals_refused": f"{INTERVALS}, recorded_at='typed', observe_from='2024-01-15', rows='faulty')",
    "members_now": (
        "spells_from_intervals('memberships', 'member', 'joined', 'left_on', as_of=var('as_of', '2024-03-31'),"
        " observe_from=var('observe_from', '2024-01-15'))"
    ),
    "intervals_by_month": f"{INTERVALS}, unit='month', grace=5)",
    "intervals_apart": f"{INTERVALS}, unit='week', overlaps='refuse', carry='plan')",
    "intervals_apart_refused": f"{INTERVALS}, unit='week', overlaps='refuse', rows='faulty')",
    "intervals_by_minute": f"{INTERVALS}, unit='minute', overlaps='keep')",
    "intervals_by_minute_refused": f"{INTERVALS}, unit='minute', overlaps='keep', rows='faulty')",
    "log": f"{OF_LOG}, grace=3, carry='plan', source_rows=true)",
    "log_refused": f"{OF_LOG}, grace=3, rows='faulty')",
    "log_in_sequence": f"{OF_LOG}, sequence='nr')",
    "statuses_changed": f"{OF_STATUSES}, grace=5, cause='why', source_rows=true)",
    "statuses_refused": f"{OF_STATUSES}, ended='until', rows='faulty')",
    "statuses_with_ends": f"{OF_STATUSES}, ended='until', observe_from='2024-02-01')",
    "statuses_in_sequence": f"{OF_STATUSES}, sequence='nr', unit='hour', cause='why')",
    "statuses_by_day": f"{OF_SNAPSHOTS}, grace=1)",
    "statuses_by_day_refused": f"{OF_SNAPSHOTS}, rows='faulty')",
    "active": f"{OF_VISITS}, source_rows=true)",
    "active_to_last": f"{OF_VISITS}, ends_at='last_activity', observe_from='2024-01-15')",
    "active_by_hour": "spells_from_activity('visits', 'member', 'at', 239, unit='hour', as_of='2024-03-31')",
    "active_refused": f"{OF_VISITS}, rows='faulty')",
    "first_loan": f"{TO_FIRST})",
    "first_loan_refused": f"{TO_FIRST}, rows='faulty')",
    "timed": f"{OF_LENGTHS})",
    "timed_refused": f"{OF_LENGTHS}, rows='faulty')",
    # estimates
    "curve": f"survival_curve('stays', {BY})",
    "curve_linear": f"survival_curve('stays', {BY}, interval_scale='linear', grid='every')",
    "curve_log": f"survival_curve('stays', {BY}, interval_scale='log', horizon=4)",
    "curve_logit": f"survival_curve('stays', {BY}, interval_scale='logit', grid='every', horizon=6)",
    "curve_arcsine": f"survival_curve('stays', {BY}, interval_scale='arcsine', confidence=0.99)",
    "curve_of_many": f"survival_curve('stays', {BY}, minimum_at_risk=5)",
    "curve_hiding_few": f"survival_curve('stays', {BY}, minimum_at_risk=5, small_counts='hide')",
    "curve_band": f"survival_curve('stays', {BY}, simultaneous=true)",
    "curve_wide_band": f"survival_curve('stays', {BY}, simultaneous='hall-wellner')",
    "curve_of_crowd": "survival_curve('crowded_stays')",
    "curve_after_end": f"survival_curve('ending_stays', {BY}, interval_scale='linear')",
    "curve_of_levels": f"survival_curve('level_stays', {BY})",
    "incidence": f"cumulative_incidence('stays', {BY})",
    "incidence_of_two": f"cumulative_incidence('stays', {BY}, causes={{'moved': 'gone', 'lapsed': 'gone'}}, grid='every')",
    "incidence_censored": f"cumulative_incidence('stays', {BY}, others='censored', minimum_at_risk=3, horizon=5)",
    "incidence_almost_complete": f"cumulative_incidence('ending_stays', {BY}, interval_scale='logit')",
    "incidence_of_crowd": "cumulative_incidence('crowded_stays')",
    "life_table": f"actuarial_table('stays', {BY}, width=4)",
    "life_table_of_few": f"actuarial_table('stays', {BY}, width=3, horizon=9, minimum_at_risk=4)",
    "mean_loans": f"{OF_LOANS})",
    "mean_loans_refused": f"{OF_LOANS}, rows='faulty')",
    "mean_loans_by_age": "mean_cumulative_count('watched_stays', 'loans', 'who', 'age', by='plan', happened_as='tenure', variance='poisson', interval_scale='linear', grid='every')",
    "mean_loans_by_age_refused": "mean_cumulative_count('watched_stays', 'loans', 'who', 'age', happened_as='tenure', rows='faulty')",
    "states": f"{OF_HISTORY}, sequence='nr')",
    "states_refused": f"{OF_HISTORY}, sequence='nr', origin='joined', rows='faulty')",
    "states_from_joining": f"{OF_HISTORY}, sequence='nr', origin='joined', observe_from='2024-01-03', grid='every', horizon=20)",
    # read-outs
    "shares": f"survival_at(ref('curve'), [0, 3, 4, 10, 30], {BY})",
    "shares_of_many": f"survival_at(ref('curve_of_many'), [2, 3, 4, 7, 10, 30], {BY})",
    "medians": f"survival_quantiles(ref('curve'), [0.25, 0.5, 0.9], {BY})",
    "medians_met": f"survival_quantiles(ref('curve_of_levels'), [0.5, 0.9], {BY})",
    "means": f"restricted_mean(ref('curve'), [3, 6, 10, 20], {BY})",
    "means_from_two": f"restricted_mean(ref('curve'), [5, 9], {BY}, survived=2, confidence=0.8)",
    "beyond": f"survival_beyond(ref('curve'), [0, 2, 4], {BY})",
    "cohorts": f"cohort_readout('stays', 'started_at', [0, 3, 12], {BY}, period='month')",
    "bands": f"hazard_by_band('stays', {BY}, width=4)",
    "bands_to_ten": f"hazard_by_band('stays', {BY}, width=3, horizon=10, confidence=0.9)",
    "incidence_shares": f"incidence_at(ref('incidence'), [0, 3, 4, 10, 30], {BY})",
    "incidence_rates": f"incidence_hazards(ref('incidence'), {BY})",
    "incidence_parts": f"incidence_stacked(ref('incidence'), {BY})",
    # comparisons
    "logrank": "log_rank_test('stays', 'plan', pairs='all', most_groups=4)",
    "logrank_stratified": "log_rank_test('stays', 'plan', strata='branch', pairs='reference', reference='household', adjustment='bonferroni', most_groups=4)",
    "logrank_gehan": "log_rank_test('stays', 'plan', weighting='gehan', pairs='all', adjustment='benjamini-hochberg', most_groups=4)",
    "logrank_tarone_ware": "log_rank_test('stays', 'plan', weighting='tarone-ware', most_groups=4)",
    "logrank_peto": "log_rank_test('stays', 'plan', weighting='peto', most_groups=4)",
    "logrank_modified_peto": "log_rank_test('stays', 'plan', weighting='modified-peto', most_groups=4)",
    "logrank_early": "log_rank_test('stays', 'plan', weighting='fleming-harrington(1, 0)', most_groups=4)",
    "logrank_late": "log_rank_test('stays', 'plan', weighting='fleming-harrington(0, 1)', most_groups=4)",
    "logrank_of_crowd": "log_rank_test('crowded_stays', 'branch', most_groups=3)",
    "share_differences": "difference_at(ref('curve'), 'plan', [3, 5], 'household')",
    "share_differences_log_log": "difference_at(ref('curve'), 'plan', [3, 5], 'household', test_scale='log-log', confidence=0.8)",
    "share_differences_logit": "difference_at(ref('curve'), 'plan', [3, 5], 'household', test_scale='logit')",
    "mean_differences": "difference_in_restricted_mean(ref('curve'), 'plan', [4, 6], 'household')",
    "loan_differences": "difference_in_mean_count(ref('mean_loans'), 'plan', [3, 10, 30], reference='household')",
    "trend": "trend_test('stays', 'stage')",
    "trend_weighted": "trend_test('stays', 'plan', scores=['household', 'individual', none, 'trial'], strata='branch', weighting='peto')",
    "events_wanted": "events_needed(0.7, power=0.9, alpha=0.01, allocation=0.3)",
    "events_wanted_one_sided": "events_needed(1.6, sides=1)",
    "wait": f"time_to_events_needed('stays', 0.2, {BY}, longest=2000)",
    "wait_with_pause": "time_to_events_needed('stays', 0.2, intake=0.5, intake_lasts=40, allocation=0.4, longest=2000)",
    "gray": "incidence_gray_test('stays', 'plan', 'moved', most_groups=4)",
    "logrank_of_cause": "incidence_log_rank_test('stays', 'plan', 'moved', most_groups=4)",
}
