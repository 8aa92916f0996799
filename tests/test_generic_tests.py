"""The generic tests pass good tables and find each kind of fault that they name, on the engine itself."""

from __future__ import annotations

import math
from datetime import date
from typing import Any

import pytest
from harness import Engine
from hypothesis import given, settings
from hypothesis import strategies as st
from strategies import spell_rows

Row = dict[str, Any]

SOUND = "test_spells_are_sound('spells')"
APART = "test_no_overlapping_spells('spells')"
ACCOUNTED = "test_every_row_accounted_for('spells', sources=['raw', 'more'], faulty='faulty')"
ACCOUNTED_SINGLE = (
    "test_every_row_accounted_for('spells', sources='raw', faulty='faulty', rows_per_spell='1')"
)
CURVE = "test_curve_is_sound('curve', by=['plan'], spells='spells')"
CURVE_TO_5 = "test_curve_is_sound('curve', by=['plan'], spells='spells', horizon=5)"
CURVE_ALONE = "test_curve_is_sound('curve', by='plan')"
CURVE_LATE = "test_curve_is_sound('curve', by=['plan'], late_entry=true)"
CURVE_OF_ALL = "test_curve_is_sound('curve', spells='spells')"
MAKE = "survival_curve('spells', by=['plan'])"
MAKE_TO_5 = "survival_curve('spells', by=['plan'], horizon=5)"
MAKE_HIDDEN = (
    "survival_curve('spells', by=['plan'], grid='every', minimum_at_risk=3, small_counts='hide',"
    " weights='fractional')"
)
MAKE_OF_ALL = "survival_curve('spells', interval_scale='linear', grid='every')"
CALLS = [
    SOUND, APART, ACCOUNTED, ACCOUNTED_SINGLE, CURVE, CURVE_TO_5, CURVE_ALONE, CURVE_LATE, CURVE_OF_ALL,
    MAKE, MAKE_TO_5, MAKE_HIDDEN, MAKE_OF_ALL,
]  # fmt: skip

SPELL_TYPES = {
    "subject_id": "text",
    "spell_number": "bigint",
    "started_at": "date",
    "last_seen_at": "date",
    "entry": "bigint",
    "duration": "bigint",
    "event": "bigint",
    "cause": "text",
    "weight": "bigint",
    "source_rows": "bigint",
}
OUTCOME_TYPES = {
    "plan": "text",
    "entry": "bigint",
    "duration": "bigint",
    "event": "bigint",
    "weight": "double",
}
FIGURES = (
    "hazard",
    "survival",
    "std_error",
    "survival_lower",
    "survival_upper",
    "cumulative_hazard",
    "cumulative_hazard_std_error",
)
CURVE_TYPES = {
    "plan": "text",
    **dict.fromkeys(("duration", "at_risk", "events", "censored"), "bigint"),
    **dict.fromkeys(FIGURES, "double"),
}


@pytest.fixture(scope="module")
def rendered(engine) -> Engine:
    engine.render_all(CALLS)
    return engine


# Spell tables


def spell(subject: str | None, number: int, start: int | None, end: int | None, **changes: Any) -> Row:
    """A spell in January 2024, from one day of the month to another."""
    ends = [day and date(2024, 1, day) for day in (start, end)]
    row = {
        "subject_id": subject,
        "spell_number": number,
        "started_at": ends[0],
        "last_seen_at": ends[1],
        "entry": 0,
        "duration": (end or 0) - (start or 0),
        "event": 1,
        "cause": "event",
        "weight": 1,
        "source_rows": 1,
    }
    return row | changes


GOOD_SPELLS = [
    spell("ann", 1, 1, 5, source_rows=3),
    spell("ann", 2, 5, 5),
    spell("ann", 3, 9, 20, entry=11, event=0, cause=None),
    spell("bob", 1, 2, 3, cause="moved", weight=7, source_rows=2),
    spell(None, 1, None, None, duration=4),
    spell(None, 1, None, None, entry=2, duration=2, event=0, cause=None),
]


def test_good_spells_pass(rendered):
    rendered.load("spells", SPELL_TYPES, GOOD_SPELLS)
    assert rendered.run(SOUND) == []
    assert rendered.run(APART) == []


def test_an_empty_table_passes(rendered):
    rendered.load("spells", SPELL_TYPES, [])
    assert rendered.run(SOUND) == []
    assert rendered.run(APART) == []


@pytest.mark.parametrize(
    ("changes", "problem"),
    [
        ({"subject_id": None}, "subject_id is null"),
        ({"spell_number": None}, "spell_number is not 1, 2, …"),
        ({"spell_number": 0}, "spell_number is not 1, 2, …"),
        ({"started_at": None}, "last_seen_at without started_at"),
        ({"last_seen_at": None}, "started_at without last_seen_at"),
        ({"last_seen_at": date(2024, 1, 1)}, "last_seen_at is before started_at"),
        ({"entry": None}, "entry is null or negative"),
        ({"entry": -1}, "entry is null or negative"),
        ({"duration": None}, "duration is null or below entry"),
        ({"entry": 3}, "duration is null or below entry"),
        ({"event": None}, "event is neither 0 nor 1"),
        ({"event": 2}, "event is neither 0 nor 1"),
        ({"cause": None}, "an event without a cause"),
        ({"event": 0}, "a cause without an event"),
        ({"weight": None}, "weight is null or not above 0"),
        ({"weight": 0}, "weight is null or not above 0"),
        ({"weight": -1}, "weight is null or not above 0"),
    ],
    ids=str,
)
def test_each_kind_of_unsound_spell_is_found(rendered, changes, problem):
    bad = spell("cleo", 1, 2, 4) | changes
    rendered.load("spells", SPELL_TYPES, [*GOOD_SPELLS, bad])
    found = rendered.run(SOUND)
    assert [row["problem"] for row in found] == [problem]
    assert {name: found[0][name] for name in SPELL_TYPES if name != "source_rows"} == {
        name: value for name, value in bad.items() if name != "source_rows"
    }


@pytest.mark.parametrize(
    ("changes", "problem"),
    [
        ({"entry": 0.5}, "entry or duration is not a whole number"),
        ({"duration": 3.5}, "entry or duration is not a whole number"),
        ({"weight": math.inf}, "weight is infinite or not a number"),
        ({"weight": math.nan}, "weight is infinite or not a number"),
        ({"weight": 0.5}, None),
    ],
    ids=str,
)
def test_spells_in_double_precision_are_whole_and_finite(rendered, changes, problem):
    types = SPELL_TYPES | dict.fromkeys(("entry", "duration", "weight"), "double")
    rendered.load("spells", types, [*GOOD_SPELLS, spell("cleo", 1, 2, 4) | changes])
    found = rendered.run(SOUND)
    assert [(row["subject_id"], row["problem"]) for row in found] == [("cleo", problem)] * bool(problem)


def test_a_spell_number_given_twice_is_found(rendered):
    rendered.load("spells", SPELL_TYPES, [*GOOD_SPELLS, spell("ann", 2, 25, 27)])
    found = rendered.run(SOUND)
    assert [(row["subject_id"], row["spell_number"]) for row in found] == [("ann", 2)] * 2
    assert {row["problem"] for row in found} == {"subject_id and spell_number stand on several rows"}


@pytest.mark.parametrize(
    ("more", "found"),
    [
        ([spell("bob", 2, 3, 8)], []),  # touches
        ([spell("bob", 2, 2, 8)], [2]),  # starts with the first
        (
            [spell("bob", 2, 4, 20), spell("bob", 3, 5, 6), spell("bob", 4, 19, 21)],
            [3, 4],
        ),  # the reach counts
        ([spell("cleo", 1, 2, 3), spell(None, 2, 2, 30), spell(None, 3, 3, 30)], []),  # other or no subjects
    ],
)
def test_overlaps_of_a_subject_are_found_and_no_others(rendered, more, found):
    rendered.load("spells", SPELL_TYPES, [*GOOD_SPELLS, *more])
    rows = rendered.run(APART)
    assert sorted(row["spell_number"] for row in rows) == found
    assert {row["subject_id"] for row in rows} <= {"bob"}


# Accounting


def load_counts(engine: Engine, raw: int, more: int, faulty: int, spells: list[Row]) -> None:
    for table, count in (("raw", raw), ("more", more), ("faulty", faulty)):
        engine.load(table, {"number": "bigint"}, [{"number": number} for number in range(count)])
    engine.load("spells", SPELL_TYPES, spells)


def test_rows_that_are_all_accounted_for_pass(rendered):
    load_counts(rendered, raw=6, more=5, faulty=2, spells=GOOD_SPELLS)
    assert rendered.run(ACCOUNTED) == []
    load_counts(rendered, raw=8, more=0, faulty=2, spells=GOOD_SPELLS)
    assert rendered.run(ACCOUNTED_SINGLE) == []
    load_counts(rendered, raw=0, more=0, faulty=0, spells=[])
    assert rendered.run(ACCOUNTED) == []


@pytest.mark.parametrize(
    ("counts", "unaccounted"),
    [
        ({"raw": 7, "more": 5, "faulty": 2}, 1),  # a row lost
        ({"raw": 6, "more": 5, "faulty": 1}, 1),  # a refused row lost
        ({"raw": 6, "more": 4, "faulty": 2}, -1),  # a row counted twice
        ({"raw": 0, "more": 0, "faulty": 0}, -9),
    ],
)
def test_rows_lost_or_counted_twice_are_found(rendered, counts, unaccounted):
    load_counts(rendered, **counts, spells=GOOD_SPELLS)
    given_rows = counts["raw"] + counts["more"]
    assert rendered.run(ACCOUNTED) == [
        {"given": given_rows, "in_spells": 9, "refused": counts["faulty"], "unaccounted_for": unaccounted}
    ]


def test_a_spell_lost_is_found_whatever_stands_for_its_rows(rendered):
    load_counts(rendered, raw=6, more=5, faulty=2, spells=GOOD_SPELLS[1:])
    assert [row["unaccounted_for"] for row in rendered.run(ACCOUNTED)] == [3]
    load_counts(rendered, raw=8, more=0, faulty=2, spells=GOOD_SPELLS[1:])
    assert [row["unaccounted_for"] for row in rendered.run(ACCOUNTED_SINGLE)] == [1]


# Curves


def outcomes(plan: str | None, *spells: tuple[int, int, int]) -> list[Row]:
    names = ("entry", "duration", "event")
    return [{"plan": plan, "weight": 1.0} | dict(zip(names, one, strict=True)) for one in spells]


#: In plan 'a', spells are at risk at 0 (6), 2 (6: one enters at 1), 3 (4), 5 (3), 6 (2) and 8 (1).
SPELLS = [
    *outcomes("a", (0, 0, 1), (0, 2, 1), (0, 2, 0), (1, 3, 1), (0, 5, 0), (0, 6, 1), (0, 8, 0)),
    *outcomes(None, (0, 1, 1), (0, 4, 0), (3, 3, 1)),
]


@pytest.fixture(scope="module")
def good_curve(rendered) -> list[Row]:
    rendered.load("spells", OUTCOME_TYPES, SPELLS)
    return sorted(rendered.run(MAKE), key=lambda row: (row["plan"] or "", row["duration"]))


def problems(engine: Engine, call: str, curve: list[Row]) -> set[tuple[str | None, int | None, str]]:
    """What the test finds in a curve of SPELLS: plan, duration and problem."""
    engine.load("spells", OUTCOME_TYPES, SPELLS)
    engine.load("curve", CURVE_TYPES, curve)
    return {(row["plan"], row["duration"], row["problem"]) for row in engine.run(call)}


def changed(curve: list[Row], at: int, **changes: Any) -> list[Row]:
    """The curve with other values in the row of plan 'a' at a duration."""
    assert any(row["plan"] == "a" and row["duration"] == at for row in curve)
    return [row | changes if row["plan"] == "a" and row["duration"] == at else dict(row) for row in curve]


def test_a_good_curve_passes_with_and_without_its_spells(rendered, good_curve):
    assert [row["at_risk"] for row in good_curve if row["plan"] == "a"] == [6, 6, 4, 3, 2, 1]
    assert problems(rendered, CURVE, good_curve) == set()
    assert problems(rendered, CURVE_LATE, good_curve) == set()
    assert problems(rendered, CURVE_ALONE, good_curve) == {
        ("a", 2, "at_risk grows, though nobody may enter late")
    }
    assert problems(rendered, CURVE_ALONE, [row for row in good_curve if row["plan"] is None]) == set()
    assert problems(rendered, CURVE_LATE, []) == set()


@settings(max_examples=60)
@given(
    rows=st.one_of(spell_rows(), spell_rows(fractional=True)),
    calls=st.sampled_from(
        [
            (MAKE, CURVE),
            (MAKE, CURVE_LATE),
            (MAKE_TO_5, CURVE_TO_5),
            (MAKE_HIDDEN, CURVE),
            (MAKE_OF_ALL, CURVE_OF_ALL),
        ]
    ),
)
def test_any_curve_of_the_package_passes(rendered, rows, calls):
    make, test = calls
    if any(row["weight"] != int(row["weight"]) for row in rows):
        make, test = MAKE_HIDDEN, CURVE  # counts of fractional weights are only known as such
    rendered.load("spells", OUTCOME_TYPES, rows)
    rendered.make("curve", make)
    assert rendered.run(test) == []


@pytest.mark.parametrize(
    ("duration", "changes", "problem"),
    [
        (2, {"events": -1}, "a count is negative"),
        (2, {"censored": -1}, "a count is negative"),
        (2, {"at_risk": -6}, "a count is negative"),
        (2, {"events": 7}, "more ended or were censored than were at risk"),
        (2, {"survival": 1.5}, "a share is outside 0 and 1"),
        (2, {"survival": -0.5}, "a share is outside 0 and 1"),
        (2, {"hazard": 1.5}, "a share is outside 0 and 1"),
        (2, {"hazard": -0.5}, "a share is outside 0 and 1"),
        (2, {"survival_lower": -0.5}, "a bound is outside 0 and 1"),
        (2, {"survival_upper": 1.5}, "a bound is outside 0 and 1"),
        (3, {"survival_lower": 0.9}, "survival is outside its bounds"),
        (3, {"survival_upper": 0.1}, "survival is outside its bounds"),
        (3, {"std_error": -0.5}, "a figure is negative"),
        (0, {"cumulative_hazard": -0.5}, "a figure is negative"),
        (3, {"survival": 0.9, "survival_upper": 1.0}, "survival rises"),
        (3, {"cumulative_hazard": 0.01}, "cumulative_hazard falls"),
        (3, {"survival": None}, "survival and hazard are not null together"),
        (3, {"hazard": None}, "survival and hazard are not null together"),
    ],
    ids=str,
)
def test_each_kind_of_unsound_curve_row_is_found(rendered, good_curve, duration, changes, problem):
    bad = changed(good_curve, duration, **changes)
    assert ("a", duration, problem) in problems(rendered, CURVE, bad)
    assert ("a", duration, problem) in problems(rendered, CURVE_LATE, bad)
    assert all(plan == "a" for plan, _, _ in problems(rendered, CURVE, bad))


def test_rows_missing_doubled_or_out_of_place_are_found(rendered, good_curve):
    without_0 = [row for row in good_curve if row["duration"] != 0]
    for call in (CURVE, CURVE_LATE):
        found = problems(rendered, call, without_0)
        assert {(plan, problem) for plan, _, problem in found} >= {
            ("a", "the group has no row at duration 0"),
            (None, "the group has no row at duration 0"),
        }
        doubled = [*good_curve, *(row for row in good_curve if row["duration"] == 3)]
        assert ("a", 3, "the duration stands on several rows of its group") in problems(
            rendered, call, doubled
        )
        for nowhere in (None, -1):
            misplaced = changed(good_curve, 3, duration=nowhere)
            assert ("a", nowhere, "duration is null or negative") in problems(rendered, call, misplaced)


def test_counts_that_are_not_those_of_the_spells_are_found(rendered, good_curve):
    ended = "events and censored up to here are not those of the spells"
    caused = "events up to here are not those of the spells"
    at_risk = "at_risk is not the number of spells under observation"
    assert ("a", 3, at_risk) in problems(rendered, CURVE, changed(good_curve, 3, at_risk=5))
    assert ("a", 3, at_risk) in problems(rendered, CURVE, changed(good_curve, 3, at_risk=3))
    one_more = problems(rendered, CURVE, changed(good_curve, 5, censored=2))
    assert one_more == {("a", 5, ended), ("a", 6, ended), ("a", 8, ended)}
    swapped = problems(rendered, CURVE, changed(good_curve, 5, censored=0, events=1))
    assert swapped == {("a", 5, caused), ("a", 6, caused), ("a", 8, caused)}
    assert problems(rendered, CURVE, [row for row in good_curve if row["duration"] != 3]) >= {("a", 3, ended)}


def test_a_curve_that_ends_early_is_found_unless_at_its_horizon(rendered, good_curve):
    early = "the curve ends before the follow-up of its spells"
    short = [row for row in good_curve if row["duration"] <= 5]
    assert problems(rendered, CURVE, short) == {("a", 6, early), ("a", 8, early)}
    assert problems(rendered, CURVE_TO_5, short) == set()
    assert problems(rendered, CURVE_TO_5, changed(short, 3, at_risk=5)) != set()


def test_a_group_without_a_curve_is_found_null_too(rendered, good_curve):
    missing = "a group of the spells has no curve"
    without_a = problems(rendered, CURVE, [row for row in good_curve if row["plan"] is None])
    assert {(plan, problem) for plan, _, problem in without_a} == {("a", missing)}
    without_null = problems(rendered, CURVE, [row for row in good_curve if row["plan"] == "a"])
    assert {(plan, problem) for plan, _, problem in without_null} == {(None, missing)}
