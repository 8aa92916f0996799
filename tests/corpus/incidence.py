"""Causes, bands, recurrent events, states and their comparisons: many small random tables at once, and one of many durations."""

from __future__ import annotations

from datetime import date, timedelta
from random import Random

from corpus import Case, Table

SPELLS = {
    "case id": "bigint",
    "order": "text",
    "subject_id": "text",
    "started_at": "date",
    "last_seen_at": "date",
    "entry": "bigint",
    "duration": "bigint",
    "event": "bigint",
    "cause": "text",
    "weight": "bigint",
}
CAUSES = ["moved", 'O\'Hara "x" é\\n', "", None]
GROUPS = [None, "", "household", "individual"]
START = date(2024, 1, 1)


def random_spells(tables: int, seed: int, fractional: bool = False, heaviest: int = 10**6) -> list[dict]:
    dice = Random(seed)
    rows = []
    for number in range(tables):
        longest, late = dice.choice([0, 3, 15, 200]), dice.random() < 0.4
        events, causes = (
            dice.choice([[0, 1], [0, 1, 1], [0], [1]]),
            dice.choice([CAUSES[:1], CAUSES[:2], CAUSES]),
        )
        for own in range(dice.randint(1, 25)):
            duration, event = dice.randint(0, longest), dice.choice(events)
            started = START + timedelta(days=dice.randint(0, 90))
            rows.append(
                {
                    "case id": number,
                    "order": dice.choice(GROUPS),
                    "subject_id": f"{number}-{own}",
                    "started_at": started,
                    "last_seen_at": started + timedelta(days=duration),
                    "entry": dice.randint(0, duration) if late and dice.random() < 0.6 else 0,
                    "duration": duration,
                    "event": event,
                    "cause": dice.choice(causes) if event else None,
                    "weight": dice.randint(1, 640) / 64 if fractional else dice.choice([1, 1, 3, heaviest]),
                }
            )
    return rows


def random_events(spells: list[dict], seed: int) -> list[dict]:
    """Events in and out of the spells, some of which cannot be read or have no subject."""
    dice = Random(seed)
    rows = [
        {
            "who": spell["subject_id"],
            "at": (spell["started_at"] + timedelta(days=dice.randint(-2, spell["duration"] + 2))).isoformat(),
            "age": str(dice.randint(-1, spell["duration"] + 1)),
        }
        for spell in spells
        for _ in range(dice.randint(0, 4))
    ]
    return [
        *rows,
        {"who": None, "at": "2024-02-01", "age": "1"},
        {"who": "0-0", "at": "soon", "age": "2.5"},
        {"who": "0-0"},
    ]


def random_history(subjects: int, seed: int) -> list[dict]:
    dice = Random(seed)
    rows = []
    for number in range(subjects):
        day = START + timedelta(days=dice.randint(0, 200))
        plan = dice.choice(GROUPS)
        joined = day - timedelta(days=dice.choice([0, 0, 5]))
        for nr in range(dice.randint(1, 6)):
            rows.append(
                {
                    "who": f"m{number}",
                    "since": day.isoformat(),
                    "state": dice.choice(["trial", "active", "it's paused", "lapsed", "?"]),
                    "nr": nr,
                    "joined": joined.isoformat(),
                    "order": plan,
                }
            )
            day += timedelta(days=dice.choice([0, 1, 10, 60]))
    return [
        *rows,
        {"who": None, "since": "2024-02-01", "state": "trial", "nr": 1, "joined": "2024-01-01", "order": "x"},
    ]


MANY = random_spells(60, 1978)
# Where a million of the same subject stand beside one other, the robust variance has few digits left to compare.
WATCHED = random_spells(60, 1978, heaviest=20)
HISTORY = {"who": "text", "since": "text", "state": "text", "nr": "bigint", "joined": "text", "order": "text"}
BY = "by=['case id', 'order']"
STATES = ["trial", "active", "it's paused", "lapsed"]
OF_HISTORY = f"'history', 'who', 'since', 'state', {STATES!r}, sequence='nr', by='order', as_of='2024-09-01'"
CASES = [
    Case(
        "incidences of many small tables",
        {"caused_spells": Table(SPELLS, MANY)},
        [
            f"cumulative_incidence('caused_spells', {BY})",
            f"cumulative_incidence('caused_spells', {BY}, causes={{'moved': 'it is', '': 'it is'}}, grid='every', horizon=20, interval_scale='logit')",
            "cumulative_incidence('caused_spells', by='order', others='censored', interval_scale='arcsine', minimum_at_risk=3)",
            f"actuarial_table('caused_spells', {BY}, width=7)",
            "incidence_at('incidences', [0, 5, 100], by='order')",
            "incidence_hazards('incidences', by='order')",
            "incidence_stacked('incidences', by='order')",
        ],
        made={"incidences": "cumulative_incidence('caused_spells', by='order')"},
    ),
    Case(
        "comparisons of incidences",
        {"caused_pairs": Table(SPELLS, random_spells(40, 1988, heaviest=20))},
        [
            "incidence_gray_test('caused_pairs', 'order', 'moved', by='case id', most_groups=4)",
            "incidence_log_rank_test('caused_pairs', 'order', 'moved', by='case id', most_groups=4)",
        ],
    ),
    Case(
        "incidences with fractional weights",
        {"caused_parts": Table(SPELLS | {"weight": "double"}, random_spells(20, 1995, fractional=True))},
        [
            f"cumulative_incidence('caused_parts', {BY}, weights='fractional')",
            f"actuarial_table('caused_parts', {BY}, width=2, horizon=10, weights='fractional')",
        ],
    ),
    Case(
        "events that happen more than once",
        {
            "watched": Table(SPELLS, WATCHED),
            "happenings": Table({"who": "text", "at": "text", "age": "text"}, random_events(WATCHED, 1988)),
        },
        [
            f"mean_cumulative_count('watched', 'happenings', 'who', 'at', {BY})",
            "mean_cumulative_count('watched', 'happenings', 'who', 'age', by='order', happened_as='tenure', variance='poisson', grid='every')",
            "mean_cumulative_count('watched', 'happenings', 'who', 'at', rows='faulty')",
            "mean_cumulative_count('watched', 'happenings', 'who', 'age', happened_as='tenure', rows='faulty')",
            "difference_in_mean_count('counts', 'order', [0, 1, 5, 14, 100, 199], reference='household')",
            "difference_in_mean_count('counts', 'order', 5, reference='nobody', confidence=0.5)",
        ],
        made={"counts": "mean_cumulative_count('watched', 'happenings', 'who', 'at', by='order')"},
    ),
    Case(
        "states of a history",
        {"history": Table(HISTORY, random_history(150, 1986))},
        [
            f"state_shares({OF_HISTORY}, most_durations=512)",
            f"state_shares({OF_HISTORY}, origin='joined', observe_from='2024-03-01', unit='month', grid='every', horizon=6)",
            f"state_shares({OF_HISTORY}, rows='faulty')",
        ],
    ),
]
