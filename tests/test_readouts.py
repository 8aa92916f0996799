"""Read-outs of the survival curve against exact rational arithmetic, lifelines, scipy and published figures."""

from __future__ import annotations

import math
from fractions import Fraction
from functools import cache
from typing import Any

import pytest
from harness import CompilationError, Engine
from hypothesis import example, given, settings
from hypothesis import strategies as st
from spellcurve import exact, exact_readouts, group_spells
from strategies import spell_rows

TOLERANCE = 1e-10
WHOLE = {"plan": "text", "entry": "bigint", "duration": "bigint", "event": "bigint", "weight": "bigint"}
DURATIONS = [0, 1, 2, 3, 5, 8, 11, 12, 13, 30]
SHARES = [0.1, 0.25, 1 / 3, 0.5, 0.75, 0.9, 0.999]
HORIZONS = [1, 2, 4, 7, 12, 13, 20]
CURVES: list[dict[str, Any]] = [
    {},
    {"grid": "every"},
    {"horizon": 5, "interval_scale": "linear"},
    {"grid": "every", "horizon": 7, "minimum_at_risk": 4},
    {"minimum_at_risk": 3, "interval_scale": "arcsine"},
    {"minimum_at_risk": 5, "small_counts": "hide"},
]
READOUTS = {
    "survival_at": f"survival_at('curve', {DURATIONS}, by=['plan'])",
    "survival_quantiles": f"survival_quantiles('curve', {SHARES}, by=['plan'])",
    "restricted_mean": f"restricted_mean('curve', {HORIZONS}, by=['plan'], confidence=0.9)",
    "restricted_mean from 3": "restricted_mean('curve', [4, 5, 9, 13], by=['plan'], survived=3)",
}


def curve_call(**options: Any) -> str:
    return "survival_curve('spells', by=['plan']" + "".join(f", {name}={value!r}" for name, value in options.items()) + ")"


def spells_of(rows: list[dict]) -> dict:
    return group_spells(
        exact.Spell(row["entry"], row["duration"], row["event"], Fraction(row["weight"]), group=(row["plan"],))
        for row in rows
    )


def close(actual: Any, expected: Any, allowance: float = 1e-12) -> bool:
    """Whether a figure is within the tolerance; the allowance is for differences of larger numbers."""
    if actual is None or expected is None or isinstance(expected, str):
        return actual == expected
    return math.isclose(actual, float(expected), rel_tol=TOLERANCE, abs_tol=allowance)


def compare(actual: list[dict], expected: dict[tuple, dict[str, Any]], key: tuple[str, ...]) -> None:
    """Rows, found by their key, hold exactly the figures expected of them."""
    found = {tuple(row[name] for name in key): row for row in actual}
    assert len(found) == len(actual), "two rows for one place"
    assert found.keys() == expected.keys()
    for place, figures in expected.items():
        for name, figure in figures.items():
            assert close(found[place][name], figure), f"{name} at {place} is {found[place][name]}, not {figure}"


def at_figures(found: exact_readouts.SurvivalAt) -> dict[str, Any]:
    def rest(share: Any) -> Any:
        return None if share is None else 1 - share

    return {
        "survival": found.survival,
        "survival_lower": found.survival_lower,
        "survival_upper": found.survival_upper,
        "event_share": rest(found.survival),
        "event_share_lower": rest(found.survival_upper),
        "event_share_upper": rest(found.survival_lower),
        "at_risk": found.at_risk,
        "status": found.status,
    }


def check_readouts(engine: Engine, rows: list[dict], options: dict[str, Any]) -> None:
    engine.render_all([curve_call(**options), *READOUTS.values()])
    engine.load("spells", WHOLE, rows)
    engine.make("curve", curve_call(**options))
    curves = exact.survival_curves(spells_of(rows), **options)
    compare(
        engine.run(READOUTS["survival_at"]),
        {
            (*group, t): at_figures(exact_readouts.survival_at(curve, t))
            for group, curve in curves.items()
            for t in DURATIONS
        },
        ("plan", "duration"),
    )
    compare(
        engine.run(READOUTS["survival_quantiles"]),
        {
            (*group, share): vars(exact_readouts.survival_quantile(curve, share))
            for group, curve in curves.items()
            for share in SHARES
        },
        ("plan", "share"),
    )
    for call, horizons, extra in [
        ("restricted_mean", HORIZONS, {"confidence": 0.9}),
        ("restricted_mean from 3", [4, 5, 9, 13], {"survived": 3}),
    ]:
        compare(
            engine.run(READOUTS[call]),
            {
                (*group, horizon): vars(exact_readouts.restricted_mean(curve, horizon, **extra))
                for group, curve in curves.items()
                for horizon in horizons
            },
            ("plan", "horizon"),
        )


@given(rows=spell_rows(), options=st.sampled_from(CURVES))
@example(rows=[], options={})
@example(rows=[{"plan": None, "entry": 0, "duration": 0, "event": 1, "weight": 1}], options={})
@example(rows=[{"plan": "a", "entry": 4, "duration": 4, "event": 1, "weight": 1}], options={})
@settings(max_examples=150)
def test_readouts_are_those_of_exact_arithmetic(engine, rows, options):
    check_readouts(engine, rows, options)


def test_three_thousand_durations_of_a_billion_spells(engine):
    rows = [
        {
            "plan": "a",
            "entry": 0 if duration % 7 else duration // 2,
            "duration": duration,
            "event": int(duration % 3 == 0),
            "weight": 333_333 + 7919 * duration % 4001,
        }
        for duration in range(3_000)
    ]
    engine.load("spells", WHOLE, rows)
    engine.make("curve", curve_call())
    (curve,) = exact.survival_curves(spells_of(rows)).values()
    mean = engine.run("restricted_mean('curve', 2900)")[0]
    expected = exact_readouts.restricted_mean(curve, 2900)
    for name in ("restricted_mean", "std_error", "restricted_mean_lower", "restricted_mean_upper"):
        assert close(mean[name], getattr(expected, name), allowance=0), name


@cache
def products_that_meet_a_level() -> list[dict]:
    """Spells whose survival falls to exactly 1 - share by several steps, one group for each way there.

    From n at risk to m at risk without censoring: survival is m / n, whatever the steps in between.
    """
    rows = []
    for n in range(2, 41):
        for m in range(1, n):
            if Fraction(m, n) not in {Fraction(1, 2), Fraction(1, 4), Fraction(3, 4), Fraction(1, 10), Fraction(9, 10)}:
                continue
            for steps in {1, 2, 3, n - m} & set(range(1, n - m + 1)):
                losses = [(n - m) // steps + (1 if i < (n - m) % steps else 0) for i in range(steps)]
                group = f"{n} to {m} in {steps}"
                rows += [
                    {"plan": group, "entry": 0, "duration": 2 + i, "event": 1, "weight": loss * 1000}
                    for i, loss in enumerate(losses)
                ]
                rows.append({"plan": group, "entry": 0, "duration": 99, "event": 0, "weight": m * 1000})
    return rows


def test_a_curve_that_meets_a_level_exactly_has_its_quantile_there(engine):
    engine.load("spells", WHOLE, products_that_meet_a_level())
    engine.make("curve", curve_call())
    rows = engine.run("survival_quantiles('curve', [0.1, 0.25, 0.5, 0.75, 0.9], by=['plan'])")
    met = 0
    for row in rows:
        n, m, steps = (int(word) for word in row["plan"].replace("to", "").replace("in", "").split())
        if Fraction(m, n) == 1 - Fraction(str(row["share"])):
            assert (row["duration"], row["status"]) == (1 + steps, "reached"), row
            met += 1
    assert met > 100


def test_three_quarters_of_two_thirds_is_a_half(engine):
    rows = [
        {"plan": "a", "entry": 0, "duration": 1, "event": 1, "weight": 1},
        {"plan": "a", "entry": 0, "duration": 2, "event": 1, "weight": 1},
        {"plan": "a", "entry": 0, "duration": 3, "event": 0, "weight": 2},
    ]
    engine.load("spells", WHOLE, rows)
    engine.make("curve", curve_call())
    assert engine.run("survival_quantiles('curve')")[0]["duration"] == 2


def test_a_curve_still_at_six_tenths_does_not_tell_the_median_or_what_comes_later(engine):
    rows = [{"plan": "a", "entry": 0, "duration": 10, "event": 1, "weight": 4}] + [
        {"plan": "a", "entry": 0, "duration": 20, "event": 0, "weight": 6}
    ]
    engine.load("spells", WHOLE, rows)
    engine.make("curve", curve_call())
    median = engine.run("survival_quantiles('curve')")[0]
    assert median["duration"] is None and median["status"] == "not_reached"
    later = engine.run("survival_at('curve', [20, 21, 400])")
    told = {row["duration"]: (row["status"], row["survival"] and round(row["survival"], 12)) for row in later}
    assert told == {20: ("observed", 0.6), 21: ("beyond_follow_up", None), 400: ("beyond_follow_up", None)}
    assert engine.run("restricted_mean('curve', 21)")[0]["restricted_mean"] is None
