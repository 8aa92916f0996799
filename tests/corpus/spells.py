"""Every builder on many subjects' untidy rows, typed and as text."""

from __future__ import annotations

from datetime import date, datetime, timedelta
from random import Random

from strategies import AS_OF, DAYS, TIMES, UNREADABLE

from corpus import Case, Table

RAW = {
    "subject_key": "text",
    "began": "text",
    "ended": "text",
    "kind": "text",
    "written_on": "text",
    "nr": "bigint",
    "plan name": "text",
}
TYPED = RAW | {"began": "moment", "ended": "date", "written_on": "date"}
KINDS = ["join", "join", "leave", "lapse", "active", "active", "paused", "chat", None]


def random_rows(subjects: int, seed: int, typed: bool) -> list[dict]:
    dice = Random(seed)

    def moment() -> str | None:
        if dice.random() < 0.08:
            return None
        return dice.choice(UNREADABLE) if dice.random() < 0.08 else dice.choice(DAYS) + dice.choice(TIMES)

    def day() -> date | None:
        return None if dice.random() < 0.1 else date(2023, 12, 1) + timedelta(days=dice.randrange(150))

    def time() -> datetime | None:
        some_day = day()
        return some_day and datetime.combine(some_day, datetime.min.time()) + timedelta(
            microseconds=dice.randrange(86_400_000_000)
        )

    rows = []
    for number in range(subjects):
        for _ in range(dice.randint(1, 7)):
            began = time() if typed else moment()
            rows.append(
                {
                    "subject_key": None if dice.random() < 0.02 else f"é'{number}\"",
                    "began": began,
                    "ended": day() if typed else moment(),
                    "kind": dice.choice(KINDS),
                    "written_on": day() if typed else moment(),
                    "nr": dice.randint(1, 4),
                    "plan name": f"of {began}"[:12],
                }
            )
    return rows


def calls(table: str) -> list[str]:
    shared = f"as_of='{AS_OF}', carry=['plan name'], source_rows=true"
    start = f"'{table}', 'subject_key', 'began'"
    every = [
        f"spells_from_intervals({start}, 'ended', cause='kind', unit='minute', recorded_at='written_on', {shared}",
        f"spells_from_intervals({start}, 'ended', unit='month', grace=20, observe_from='2024-01-31', {shared}",
        f"spells_from_intervals({start}, 'ended', unit='week', overlaps='refuse', {shared}",
        f"spells_from_event_log({start}, 'kind', ['join'], {{'leave': 'left', 'lapse': 'lapsed'}}, grace=3, {shared}",
        f"spells_from_status_history({start}, 'kind', ['active', 'join'], cause='kind', sequence='nr', unit='hour', {shared}",
        f"spells_from_status_history({start}, 'kind', ['active', 'join'], ended='ended', {shared}",
        f"spells_from_status_history({start}, 'kind', ['active'], shape='snapshots', grace=2, cause='kind', {shared}",
        f"spells_from_activity({start}, 30, {shared}",
        f"spells_from_activity({start}, 100, ends_at='last_activity', unit='hour', {shared}",
    ]
    return [f"{call}, rows='{rows}')" for call in every for rows in ("sound", "faulty")]


LENGTHS = {"who": "text", "months": "text", "waited": "text", "left": "text", "stands for": "text"}


def random_lengths(count: int) -> list[dict]:
    dice = Random(1972)
    numbers = ["0", "3", "7", "7.0", "12", "2.5", "-1", "", "many", "1e1", "nan", None]
    outcomes = ["0", "1", "true", "FALSE", "2", None]
    return [
        {
            "who": dice.choice(["ann", "bob", None]),
            "months": dice.choice(numbers),
            "waited": dice.choice(numbers),
            "left": dice.choice(outcomes),
            "stands for": dice.choice([*numbers, "0.5"]),
        }
        for _ in range(count)
    ]


UNSOUND = {
    "subject_id": "text",
    "spell_number": "bigint",
    "started_at": "date",
    "last_seen_at": "date",
    "entry": "double",
    "duration": "double",
    "event": "bigint",
    "cause": "text",
    "weight": "double",
}


def unsound_spells() -> list[dict]:
    changes = [
        {},
        {"spell_number": 0},
        {"last_seen_at": None},
        {"entry": None},
        {"duration": -1.5},
        {"entry": 0.25},
        {"duration": 4.5},
        {"event": 2},
        {"cause": None},
        {"weight": None},
        {"weight": -0.5},
        {"weight": 2e300},
    ]
    row = dict(
        zip(UNSOUND, (None, 1, date(2024, 1, 1), date(2024, 1, 5), 0.0, 4.0, 1, "moved", 0.5), strict=True)
    )
    return [row | {"subject_id": f"s{number}"} | change for number, change in enumerate(changes)]


FIRST = "'began', 'began', as_of='2024-03-31', cause='kind', recorded_at='written_on', source_rows=true"
DURATIONS = "'lengths', 'months', 'left', entry='waited', weight='stands for', carry='who'"
CASES = [
    Case("builders on text", {"texts": Table(RAW, random_rows(150, 1955, typed=False))}, calls("texts")),
    Case(
        "builders on dates and timestamps",
        {"typed": Table(TYPED, random_rows(150, 1977, typed=True))},
        calls("typed"),
    ),
    Case(
        "time to first event",
        {
            "origins": Table(RAW, random_rows(80, 1981, False)),
            "happenings": Table(RAW, random_rows(80, 1982, False)),
        },
        [
            f"spells_to_first_event('origins', 'happenings', 'subject_key', {FIRST}, rows='{r}')"
            for r in ("sound", "faulty")
        ],
    ),
    Case(
        "unsound spells",
        {"doubtful": Table(UNSOUND, unsound_spells())},
        ["test_spells_are_sound('doubtful')"],
    ),
    Case(
        "durations",
        {"lengths": Table(LENGTHS, random_lengths(400))},
        [f"spells_from_durations({DURATIONS}, rows='{rows}')" for rows in ("sound", "faulty")],
    ),
]
