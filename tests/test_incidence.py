"""cumulative_incidence and what is read from it, against exact rational arithmetic and reference
libraries.
"""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import pytest
from harness import CompilationError, Engine
from hypothesis import example, given, settings
from hypothesis import strategies as st
from spellcurve import exact, exact_incidence
from strategies import GROUPS

TOLERANCE = 1e-10
WHOLE = {
    "plan": "text",
    "entry": "bigint",
    "duration": "bigint",
    "event": "bigint",
    "cause": "text",
    "weight": "bigint",
}
FRACTIONAL = WHOLE | {"weight": "double"}
FIGURES = ("at_risk", "events", "incidence", "std_error", "incidence_lower", "incidence_upper")
CAUSES = ["moved", "price", 'O\'Hara "x" é', ""]
MERGED = {"moved": "gone", "": "gone", "price": "cost", "never seen": "no one"}
OPTIONS: list[dict[str, Any]] = [
    {},
    {"interval_scale": "linear", "confidence": 0.9},
    {"interval_scale": "log", "others": "censored"},
    {"interval_scale": "logit", "grid": "every", "horizon": 4},
    {"interval_scale": "arcsine", "confidence": 0.5, "horizon": 5},
    {"causes": MERGED, "grid": "every"},
    {"causes": ["price", "nobody"], "others": "censored", "horizon": 0},
]


@st.composite
def rows_with_causes(draw, fractional: bool = False, largest: int = 12, most: int = 40):
    """Rows of a spell table with causes: ties, late entry, weights, null groups, events without a cause."""
    late, tied = draw(st.booleans()), draw(st.booleans())
    events = draw(st.sampled_from([[0, 1], [0], [1], [1, 1, 1, 0]]))
    causes = draw(st.sampled_from([CAUSES[:1], CAUSES[:2], [*CAUSES, None]]))
    top = 3 if tied else largest
    rows = []
    for _ in range(draw(st.integers(0, most))):
        duration = draw(st.integers(0, top))
        event = draw(st.sampled_from(events))
        rows.append(
            {
                "plan": draw(st.sampled_from(GROUPS)),
                "entry": draw(st.integers(0, duration)) if late and draw(st.booleans()) else 0,
                "duration": duration,
                "event": event,
                "cause": draw(st.sampled_from(causes)) if event else None,
                "weight": draw(st.integers(1, 800)) / 64
                if fractional
                else draw(st.sampled_from([1, 1, 2, 7, 1000])),
            }
        )
    return rows


def in_groups(rows: list[dict], by: list[str]) -> dict[tuple, list[exact.Spell]]:
    groups: dict[tuple, list[exact.Spell]] = {}
    for row in rows:
        spell = exact.Spell(
            row["entry"], row["duration"], row["event"], Fraction(row["weight"]), row["cause"]
        )
        groups.setdefault(tuple(row[name] for name in by), []).append(spell)
    return groups


def call(macro: str, by: list[str], **options: Any) -> str:
    return f"{macro}('spells', by={by!r}{''.join(f', {name}={value!r}' for name, value in options.items())})"


def close(actual: Any, expected: Any, tolerance: float = TOLERANCE, allowance: float = 0.0) -> bool:
    if actual is None or expected is None:
        return actual is expected
    return abs(actual - float(expected)) <= tolerance * abs(float(expected)) + allowance


def check(engine: Engine, columns: dict, rows: list[dict], by: list[str], **options: Any) -> None:
    engine.load("spells", columns, rows)
    found = engine.run(call("cumulative_incidence", by, **options))
    options = {name: value for name, value in options.items() if name != "weights"}
    wanted = options.pop("causes", None)
    if isinstance(wanted, list):
        wanted = {cause: cause for cause in wanted}
    groups = in_groups(rows, by)
    if wanted is None:
        counted = [spell for spells in groups.values() for spell in spells if spell.event and spell.counts]
        seen = {"unknown" if spell.cause is None else spell.cause for spell in counted}
        wanted = {cause: cause for cause in seen}
    expected = {
        (group, row.cause, row.duration): row
        for group, spells in groups.items()
        for row in exact_incidence.cumulative_incidence(spells, wanted, **options)
    }
    actual = {(tuple(row[name] for name in by), row["cause"], row["duration"]): row for row in found}
    assert len(actual) == len(found)
    assert actual.keys() == expected.keys()
    for key, row in actual.items():
        for name in FIGURES:
            allowance = 1e-12 if name in ("incidence_lower", "incidence_upper") else 0.0
            assert close(row[name], getattr(expected[key], name), allowance=allowance), (
                key,
                name,
                row,
                expected[key],
            )


@given(rows=rows_with_causes(), options=st.sampled_from(OPTIONS), by=st.sampled_from([[], ["plan"]]))
@example(rows=[], options={}, by=["plan"])
@settings(max_examples=300)
def test_whole_weights(engine, rows, options, by):
    check(engine, WHOLE, rows, by, **options)


@given(rows=rows_with_causes(fractional=True), options=st.sampled_from(OPTIONS[:2]))
@settings(max_examples=100)
def test_fractional_weights(engine, rows, options):
    check(engine, FRACTIONAL, rows, ["plan"], weights="fractional", **options)


def many_durations(causes: list[str]) -> list[dict]:
    return [
        {
            "plan": "a",
            "entry": 0 if duration % 7 else duration // 2,
            "duration": duration,
            "event": int(duration % 3 != 1),
            "cause": causes[duration % len(causes)] if duration % 3 != 1 else None,
            "weight": 333_333 + 7919 * duration % 4001,
        }
        for duration in range(3_000)
    ]


@pytest.mark.parametrize("causes", [["one"], ["one", "two"]])
def test_three_thousand_durations_of_a_billion_spells(engine, causes):
    """Every figure at a few durations from the first to the last, against the double sum in fractions."""
    rows = many_durations(causes)
    assert sum(row["weight"] for row in rows) > 10**9
    engine.load("spells", WHOLE, rows)
    found = {(row["cause"], row["duration"]): row for row in engine.run(call("cumulative_incidence", []))}
    spells = in_groups(rows, [])[()]
    for cause, row in sampled_exactly(
        spells, [0, 1, 2, 3, 10, 1500, 2500, 2900, 2990, 2996, 2998, 2999], causes
    ):
        for name in FIGURES:
            allowance = 1e-12 if name in ("incidence_lower", "incidence_upper") else 0.0
            assert close(found[cause, row.duration][name], getattr(row, name), allowance=allowance), (
                cause,
                row,
                name,
            )


def sampled_exactly(spells: list[exact.Spell], durations: list[int], causes: list[str]):
    """Rows at some durations only. Numerators of thousands of digits make the full double sum slow, so
    each term is rounded to 60 digits.
    """
    ends: dict[str, dict[int, Fraction]] = {}
    everyone: dict[int, Fraction] = {}
    for spell in spells:
        if spell.event and spell.counts:
            own = ends.setdefault(spell.cause, {})
            own[spell.duration] = own.get(spell.duration, Fraction(0)) + spell.weight
            everyone[spell.duration] = everyone.get(spell.duration, Fraction(0)) + spell.weight
    at_risk = exact._at_risk_counter(spells)
    for cause in causes:
        steps = exact_incidence.incidence_steps(at_risk, ends[cause], everyone, digits=80)
        for t in durations:
            until = [step for step in steps if step.duration <= t]
            incidence = until[-1].incidence if until else Fraction(0)
            complete = incidence == 1 or (until and until[-1].survival == 0 and len(causes) == 1)
            variance = None if complete else exact_incidence.incidence_variance(until, digits=80)
            incidence = Fraction(1) if complete else incidence
            error, lower, upper = exact_incidence.share_uncertainty(incidence, variance, 0.95, "log-log")
            yield (
                cause,
                exact_incidence.IncidenceRow(
                    cause,
                    t,
                    at_risk(t),
                    ends[cause].get(t, Fraction(0)),
                    incidence,
                    variance,
                    error,
                    lower,
                    upper,
                ),
            )


def test_a_thin_tail_after_a_billion(engine):
    """A risk set of two at the end of a large one: terms of very different size in one variance."""
    rows = [
        {"plan": "a", "entry": 0, "duration": duration, "event": 1, "cause": cause, "weight": weight}
        for duration, cause, weight in [
            (1, "moved", 1),
            (2, "price", 10**8),
            (3, "moved", 3 * 10**8),
            (4, "price", 7),
            (5, "moved", 10**6),
            (8, "price", 1),
            (9, "moved", 1),
            (10, "price", 1),
        ]
    ] + [{"plan": "a", "entry": 0, "duration": 6, "event": 0, "cause": None, "weight": 6 * 10**8}]
    for scale in exact.INTERVAL_SCALES:
        check(engine, WHOLE, rows, [], interval_scale=scale)


def test_an_incidence_that_is_almost_complete_keeps_its_digits(engine):
    rows = [
        {
            "plan": "a",
            "entry": 0,
            "duration": d,
            "event": 1,
            "cause": "price" if d % 40 == 7 else "moved",
            "weight": w,
        }
        for d, w in enumerate([5 * 10**8, 3 * 10**8, 10**8, 9 * 10**7, 10**6, 10**5, 10**4, 300, 20, 5, 2, 1])
    ]
    check(engine, WHOLE, rows, [])
    check(engine, WHOLE, [row | {"cause": "moved"} for row in rows], [], interval_scale="linear")


@given(rows=rows_with_causes())
@settings(max_examples=60)
def test_survival_and_incidences_add_up_to_one(engine, rows):
    engine.load("spells", WHOLE, rows)
    curve = engine.run("survival_curve('spells', by=['plan'], grid='every')")
    incidences = engine.run("cumulative_incidence('spells', by=['plan'], grid='every')")
    sums: dict[tuple, float] = {}
    for row in incidences:
        key = (row["plan"], row["duration"])
        sums[key] = sums.get(key, 0.0) + row["incidence"]
    for row in curve:
        assert (
            abs(row["survival"] + sums.get((row["plan"], row["duration"]), 1 - row["survival"]) - 1) < 1e-12
        )


@given(rows=rows_with_causes())
@settings(max_examples=60)
def test_one_cause_is_the_complement_of_survival(engine, rows):
    """On the scales that treat a share and its complement alike, with its interval."""
    engine.load("spells", WHOLE, [row | {"cause": "any" if row["event"] else None} for row in rows])
    for scale in ("linear", "logit", "arcsine"):
        curve = engine.run(f"survival_curve('spells', by=['plan'], interval_scale='{scale}')")
        found = {
            (row["plan"], row["duration"]): row
            for row in engine.run(f"cumulative_incidence('spells', by=['plan'], interval_scale='{scale}')")
        }
        for row in curve if found else []:
            other = found[row["plan"], row["duration"]]
            assert close(other["std_error"], row["std_error"], 1e-9)
            for own, opposite in (
                ("incidence_lower", "survival_upper"),
                ("incidence_upper", "survival_lower"),
            ):
                assert close(other[own], None if row[opposite] is None else 1 - row[opposite], 1e-9, 1e-12)


def test_too_few_at_risk_and_labels(engine):
    rows = [
        {
            "plan": None,
            "entry": 0,
            "duration": d,
            "event": 1,
            "cause": "moved" if d < 3 else "price",
            "weight": 1,
        }
        for d in range(1, 5)
    ]
    engine.load("spells", WHOLE, rows)
    kept = engine.run(call("cumulative_incidence", ["plan"], minimum_at_risk=3))
    assert [
        (r["duration"], r["at_risk"]) for r in kept if r["incidence"] is None and r["cause"] == "moved"
    ] == [(3, 2), (4, 1)]
    hidden = engine.run(call("cumulative_incidence", ["plan"], minimum_at_risk=3, small_counts="hide"))
    assert all(row["at_risk"] is None and row["std_error"] is None for row in hidden if row["duration"] > 2)
    net = engine.run(call("cumulative_incidence", ["plan"], others="censored"))
    assert {row["others"] for row in net} == {"censored"}
    assert list(kept[0]) == ["plan", "cause", "duration", *FIGURES]


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("'spells', cause='x'", "unknown argument 'cause'; it takes spells, by"),
        ("", "argument 'spells' is missing; give a relation"),
        ("'spells', others='ignored'", "others is 'ignored'; it must be one of 'competing', 'censored'"),
        ("'spells', causes=[]", "causes is []; it must be a value or a list of values"),
        ("'spells', causes={}", "causes is empty; it must be a cause, a list of causes, or a mapping"),
        ("'spells', causes=[7]", "causes names 7; causes and labels are texts"),
        ("'spells', by='cause'", "by names the column 'cause', which the result uses itself"),
        ("'spells', confidence=1", "confidence is 1; it must be a number between 0 and 1"),
        ("'spells', horizon=1.5", "horizon is 1.5; it must be a whole number"),
    ],
)
def test_bad_arguments_stop_compilation_with_one_sentence(engine, arguments, sentence):
    with pytest.raises(CompilationError) as caught:
        engine.render(f"cumulative_incidence({arguments})")
    assert "spellcurve.cumulative_incidence: " + sentence in str(caught.value)
