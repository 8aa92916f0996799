"""Read-outs of the survival curve against exact arithmetic, lifelines, scipy and published figures."""

from __future__ import annotations

import math
from collections import Counter
from datetime import date, datetime
from fractions import Fraction
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from harness import CompilationError, Engine
from hypothesis import example, given, settings
from hypothesis import strategies as st
from lifelines import KaplanMeierFitter
from lifelines.utils import median_survival_times, restricted_mean_survival_time
from scipy.stats import chi2, kstwobign
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
    given = "".join(f", {name}={value!r}" for name, value in options.items())
    return f"survival_curve('spells', by=['plan']{given})"


def spells_of(rows: list[dict]) -> dict:
    return group_spells(
        exact.Spell(
            row["entry"], row["duration"], row["event"], Fraction(row["weight"]), group=(row["plan"],)
        )
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
            assert close(found[place][name], figure), f"{name} at {place}: {found[place][name]}, not {figure}"


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
            if Fraction(m, n) not in {Fraction(level) for level in ("1/2", "1/4", "3/4", "1/10", "9/10")}:
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
    rows = [
        {"plan": "a", "entry": 0, "duration": 10, "event": 1, "weight": 4},
        {"plan": "a", "entry": 0, "duration": 20, "event": 0, "weight": 6},
    ]
    engine.load("spells", WHOLE, rows)
    engine.make("curve", curve_call())
    median = engine.run("survival_quantiles('curve')")[0]
    assert median["duration"] is None and median["status"] == "not_reached"
    later = engine.run("survival_at('curve', [20, 21, 400])")
    told = {row["duration"]: (row["status"], row["survival"] and round(row["survival"], 12)) for row in later}
    assert told == {20: ("observed", 0.6), 21: ("beyond_follow_up", None), 400: ("beyond_follow_up", None)}
    assert engine.run("restricted_mean('curve', 21)")[0]["restricted_mean"] is None


BEYOND = "survival_beyond('curve', [0, 2, 5, 11], by=['plan'], interval_scale='logit', confidence=0.8)"
COHORTS = f"cohort_readout('spells', 'plan', {DURATIONS}, interval_scale='log', minimum_at_risk=2)"
BANDS = "hazard_by_band('spells', by='plan', width=3)"
BANDS_TO_SEVEN = "hazard_by_band('spells', by='plan', width=4, horizon=7, confidence=0.99)"


@given(rows=spell_rows(), options=st.sampled_from(CURVES))
@example(rows=[{"plan": None, "entry": 0, "duration": 0, "event": 1, "weight": 1}], options={})
@settings(max_examples=150)
def test_conditional_survival_is_that_of_exact_arithmetic(engine, rows, options):
    engine.load("spells", WHOLE, rows)
    engine.make("curve", curve_call(**options))
    expected = {}
    for group, curve in exact.survival_curves(spells_of(rows), **options).items():
        for survived in (0, 2, 5, 11):
            for row in exact_readouts.survival_beyond(curve, survived, 0.8, "logit"):
                expected[(*group, survived, row.duration)] = vars(row)
    compare(engine.run(BEYOND), expected, ("plan", "survived", "duration"))


def cohort_figures(spells: list[exact.Spell], duration: int) -> dict[str, Any]:
    curve = exact.survival_curve(spells, interval_scale="log", minimum_at_risk=2)
    found = exact_readouts.survival_at(curve, duration)
    counted = [spell for spell in spells if spell.counts]
    total = sum(spell.weight for spell in counted)
    events = sum(spell.weight for spell in counted if spell.event and spell.duration <= duration)
    unknown = sum(spell.weight for spell in counted if not spell.event and spell.duration < duration)
    naive = Fraction(events) / total if total and found.status != "too_few_at_risk" else None
    counts = {"spells": total, "events": events, "censored": unknown, "naive_event_share": naive}
    return at_figures(found) | counts


@given(rows=spell_rows())
@settings(max_examples=100)
def test_cohorts_are_those_of_exact_arithmetic(engine, rows):
    engine.load("spells", WHOLE, rows)
    compare(
        engine.run(COHORTS),
        {
            (*group, duration): cohort_figures(spells, duration)
            for group, spells in spells_of(rows).items()
            for duration in DURATIONS
        },
        ("cohort", "duration"),
    )


def test_cohorts_by_month_show_a_triangle_that_has_not_matured(engine):
    columns = {"started_at": "date", **WHOLE}
    as_of = date(2026, 4, 1)
    starts = [date(2026, month, day) for month in (1, 2, 3) for day in (1, 15)]
    rows = []
    for start in starts:
        watched = (as_of - start).days
        rows.append(
            {"started_at": start, "plan": "a", "entry": 0, "duration": watched, "event": 0, "weight": 3}
        )
        if watched > 20:
            rows.append(
                {"started_at": start, "plan": "a", "entry": 0, "duration": 20, "event": 1, "weight": 1}
            )
    engine.load("spells", columns, rows)
    call = "cohort_readout('spells', 'started_at', [20, 40, 80], by='plan', period='month')"
    cells = {(row["cohort"].month, row["duration"]): row for row in engine.run(call)}
    assert {place: row["status"] for place, row in cells.items()} == {
        (1, 20): "observed",
        (1, 40): "observed",
        (1, 80): "observed",
        (2, 20): "observed",
        (2, 40): "observed",
        (2, 80): "beyond_follow_up",
        (3, 20): "observed",
        (3, 40): "beyond_follow_up",
        (3, 80): "beyond_follow_up",
    }
    assert cells[1, 20]["cohort"] in (date(2026, 1, 1), datetime(2026, 1, 1))
    # of March's 7 spells 3 were seen for 17 days only: the share that ignores this is too small
    assert cells[3, 20]["censored"] == 3
    assert cells[3, 20]["event_share"] == pytest.approx(1 / 4)
    assert cells[3, 20]["naive_event_share"] == pytest.approx(1 / 7)


@given(rows=spell_rows())
@example(rows=[{"plan": None, "entry": 0, "duration": 0, "event": 1, "weight": 1}])
@settings(max_examples=100)
def test_hazards_by_band_are_those_of_exact_arithmetic(engine, rows):
    engine.load("spells", WHOLE, rows)
    for call, options in [
        (BANDS, {"width": 3}),
        (BANDS_TO_SEVEN, {"width": 4, "horizon": 7, "confidence": 0.99}),
    ]:
        compare(
            engine.run(call),
            {
                (*group, band.from_duration): vars(band)
                for group, spells in spells_of(rows).items()
                for band in exact_readouts.hazard_by_band(spells, **options)
            },
            ("plan", "from_duration"),
        )


@pytest.mark.parametrize("confidence", [0.01, 0.5, 0.9, 0.95, 0.99, 0.9999, 0.999999])
def test_limits_of_a_count_are_those_of_the_poisson_distribution(engine, confidence):
    counts = [*range(1, 45), 60, 100, 999, 12_345, 10**6]
    rows = [{"plan": "a", "entry": 0, "duration": 1, "event": 0, "weight": 1}]
    rows += [{"plan": str(count), "entry": 0, "duration": 1, "event": 1, "weight": count} for count in counts]
    engine.load("spells", WHOLE, rows)
    found = engine.run(f"hazard_by_band('spells', by='plan', width=1, confidence={confidence})")
    assert len(found) == 1 + len(counts)
    for row in found:
        lower, upper = row["hazard_lower"] * row["time_at_risk"], row["hazard_upper"] * row["time_at_risk"]
        expected = exact_readouts.poisson_limits(row["events"], confidence)
        assert close(lower, expected[0], allowance=0) and close(upper, expected[1], allowance=0), row
        # scipy itself is off by 1e-9 for a million events at the last level
        rest, events = (1 - confidence) / 2, row["events"]
        assert upper == pytest.approx(chi2.isf(rest, 2 * events + 2) / 2, rel=2e-9)
        assert lower == pytest.approx(chi2.ppf(rest, 2 * events) / 2 if events else 0, rel=2e-9)


@pytest.mark.parametrize("kind", ["equal-precision", "hall-wellner"])
@given(rows=spell_rows(most=60), confidence=st.sampled_from([0.8, 0.95, 0.999]))
@settings(max_examples=40)
def test_bands_are_the_pointwise_bounds_with_another_reach(engine, kind, rows, confidence):
    allowed = 1e-8
    engine.load("spells", WHOLE, rows)
    call = curve_call(interval_scale="log", confidence=confidence, simultaneous=kind)
    found = {(row["plan"], row["duration"]): row for row in engine.run(call)}
    for group, curve in exact.survival_curves(spells_of(rows)).items():
        reaches = exact_readouts.band_reaches(curve, kind, confidence)
        for row, reach in zip(curve, reaches, strict=True):
            band = found.pop((*group, row.duration))
            lower, upper = band["survival_lower"], band["survival_upper"]
            assert band["survival"] == pytest.approx(float(row.survival), rel=TOLERANCE)
            if row.survival == 0:
                assert (lower, upper) == (None, None)
            elif reach is None:
                assert (lower, upper) == (1, 1)
            else:
                assert lower == pytest.approx(
                    float(row.survival) * math.exp(-reach), rel=allowed * max(1, reach)
                )
                assert upper == pytest.approx(
                    min(1, float(row.survival) * math.exp(reach)), rel=allowed * max(1, reach)
                )
    assert not found


def test_true_means_equal_precision(engine):
    first, second = engine.render_all(
        [curve_call(simultaneous=True), curve_call(simultaneous="equal-precision")]
    )
    assert first == second and '"simultaneous":' in first.replace(" ", "")
    assert "simultaneous" not in engine.render(curve_call(simultaneous=False))


def test_critical_values_are_the_printed_ones():
    """From memory, not read in the books.

    Klein and Moeschberger 2003, section 4.4, with a from 0.1 to 0.6 at 95%: 2.8826 (their table C.3, Nair's
    formula) and 1.3211 (their table C.4; there the curve is followed from 0.1 on, which changes no printed
    digit, since the bridge hardly ever gets that far before). Kolmogorov's 1.2238, 1.3581 and 1.6276 for the
    whole bridge, and Hall and Wellner 1980, table 1: 1.273 to a half and 1.014 to a quarter.
    """
    odds = (0.6 / 0.4) / (0.1 / 0.9)
    assert round(exact_readouts.equal_precision_critical_value(odds, 0.95), 4) == 2.8826
    assert round(exact_readouts.hall_wellner_critical_value(0.6, 0.95), 4) == 1.3211
    assert round(exact_readouts.hall_wellner_critical_value(0.5, 0.95), 3) == 1.273
    assert round(exact_readouts.hall_wellner_critical_value(0.25, 0.95), 3) == 1.014
    for confidence, printed in [(0.9, 1.2238), (0.95, 1.3581), (0.99, 1.6276)]:
        assert round(exact_readouts.hall_wellner_critical_value(1 - 1e-9, confidence), 4) == printed
        assert round(float(kstwobign.isf(1 - confidence)), 4) == printed


def log_log(survival: np.ndarray, reach: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    power = np.exp(reach / -np.log(survival))
    return survival**power, survival ** (1 / power)


def arcsine(survival: np.ndarray, reach: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    middle, half = np.arcsin(np.sqrt(survival)), reach * np.sqrt(survival / (1 - survival)) / 2
    return np.sin(np.maximum(0, middle - half)) ** 2, np.sin(np.minimum(np.pi / 2, middle + half)) ** 2


def test_bands_hold_for_the_whole_curve_as_often_as_they_say():
    """2,000 samples of 400 lifetimes, a third of them censored, at 90%, with a fixed seed.

    docs/readouts.md says what this found: the variance of the very first events is known too badly for equal
    precision on the log-log scale, where it held for 83% from the first event on.
    """
    dice = np.random.default_rng(1984)
    held, samples, size = Counter(), 2_000, 400
    for _ in range(samples):
        life, seen = dice.exponential(1, size), dice.exponential(2, size)
        order = np.argsort(np.minimum(life, seen))
        died, n = (life <= seen)[order], np.arange(size, 0, -1)
        died &= n > 20  # as far as the curve is followed
        survival = np.cumprod(np.where(died, 1 - 1 / n, 1))[died]
        greenwood = np.cumsum(np.where(died, 1 / (n * np.maximum(n - 1, 1)), 0))[died]
        last, truth = size * greenwood[-1], np.exp(-life[order][died])
        equal = exact_readouts.equal_precision_critical_value(greenwood[-1] / greenwood[0], 0.9) * np.sqrt(
            greenwood
        )
        hall_wellner = exact_readouts.hall_wellner_critical_value(last / (1 + last), 0.9)
        hall_wellner *= (1 + size * greenwood) / math.sqrt(size)
        for name, (lower, upper), skipped in [
            ("equal precision, arcsine", arcsine(survival, equal), 0),
            ("equal precision, log-log, from the fifth event", log_log(survival, equal), 4),
            ("hall-wellner, log-log", log_log(survival, hall_wellner), 0),
        ]:
            # the truth is furthest above at an event, and furthest below just before the next one
            inside = (lower <= truth) & (truth <= upper) & (lower <= np.append(truth[1:], 1))
            held[name] += bool(inside[skipped:].all())
    assert all(0.87 < count / samples < 0.94 for count in held.values()), held


def test_a_bridge_crosses_as_often_as_the_formulas_say():
    """20,000 Brownian bridges of 2,000 steps, followed from 0.1 to 0.6, drawn with a fixed seed."""
    dice = np.random.default_rng(1980)
    steps, crossed = 2_000, Counter()
    at = np.arange(1, steps + 1) / steps
    part = (at >= 0.1) & (at <= 0.6)
    scale = np.sqrt(at * (1 - at), where=part, out=np.ones(steps))
    for _ in range(20):
        walk = np.cumsum(dice.standard_normal((1_000, steps)) / math.sqrt(steps), axis=1)
        bridge = np.abs(walk - np.outer(walk[:, -1], at))
        crossed["hall-wellner"] += (bridge[:, at <= 0.6].max(axis=1) > 1.3211).sum()
        crossed["equal-precision"] += ((bridge / scale)[:, part].max(axis=1) > 2.8826).sum()
    # a walk of steps misses some crossings of the bridge between them, and more of the steeper boundary
    assert 0.044 < crossed["hall-wellner"] / 20_000 < 0.054, crossed
    assert 0.040 < crossed["equal-precision"] / 20_000 < 0.054, crossed


def reference_spells(name: str, group: str) -> list[dict]:
    seed = pd.read_csv(Path(__file__).resolve().parents[1] / "seeds" / "reference" / f"reference_{name}.csv")
    return [
        {
            "plan": row[group],
            "entry": 0,
            "duration": int(row["duration"]),
            "event": int(row["event"]),
            "weight": 1,
        }
        for _, row in seed.iterrows()
    ]


@pytest.mark.parametrize(
    ("name", "group", "interval_scale", "medians"),
    [
        # Freireich et al. 1963, limits as Klein and Moeschberger 2003, chapter 4; from memory
        ("remission", "arm", "log-log", {"6-MP": (23, 13, None), "placebo": (8, 4, 11)}),
        # Embury et al. 1977, Loprinzi et al. 1994, as statistical software commonly prints them; from memory
        ("maintenance", "arm", "log", {"maintained": (31, 18, None), "nonmaintained": (23, 8, None)}),
        ("lung_cancer", "sex", "log", {"male": (270, 212, 310), "female": (426, 348, 550)}),
    ],
)
def test_medians_and_their_limits_are_the_printed_ones(engine, name, group, interval_scale, medians):
    engine.load("spells", WHOLE, reference_spells(name, group))
    engine.make("curve", curve_call(interval_scale=interval_scale))
    rows = engine.run("survival_quantiles('curve', 0.5, by='plan')")
    assert {
        row["plan"]: (row["duration"], row["duration_lower"], row["duration_upper"]) for row in rows
    } == medians


@pytest.mark.parametrize(
    ("name", "group"), [("remission", "arm"), ("maintenance", "arm"), ("lung_cancer", "sex")]
)
def test_lifelines_reads_the_same_off_the_same_spells(engine, name, group):
    spells = reference_spells(name, group)
    engine.load("spells", WHOLE, spells)
    engine.make("curve", curve_call())
    horizons = [5, 9, 20, 28]
    means = {
        (row["plan"], row["horizon"]): row
        for row in engine.run(f"restricted_mean('curve', {horizons}, by='plan')")
    }
    medians = {row["plan"]: row["duration"] for row in engine.run("survival_quantiles('curve', by='plan')")}
    for plan in {row["plan"] for row in spells}:
        own = [row for row in spells if row["plan"] == plan]
        fitted = KaplanMeierFitter().fit([row["duration"] for row in own], [row["event"] for row in own])
        assert medians[plan] == median_survival_times(fitted)
        for horizon in horizons:
            assert means[plan, horizon]["restricted_mean"] == pytest.approx(
                restricted_mean_survival_time(fitted, t=horizon), rel=1e-9
            )


def test_the_printed_restricted_means(engine):
    """From memory, as statistical software commonly prints it for these data: 52.6 (se 19.8), 22.7 (se 4.18).

    Embury et al. 1977, the horizon at the longest duration of both arms, 161 weeks.
    """
    engine.load("spells", WHOLE, reference_spells("maintenance", "arm"))
    engine.make("curve", curve_call(interval_scale="log"))
    rows = {row["plan"]: row for row in engine.run("restricted_mean('curve', 161, by='plan')")}
    assert round(rows["nonmaintained"]["restricted_mean"], 1) == 22.7
    assert round(rows["nonmaintained"]["std_error"], 2) == 4.18
    assert round(rows["maintained"]["restricted_mean"], 1) == 52.6
    assert round(rows["maintained"]["std_error"], 1) == 19.8


@pytest.mark.parametrize(
    ("call", "sentence"),
    [
        (
            "survival_at('curve')",
            "spellcurve.survival_at: argument 'durations' is missing; give a value or a list",
        ),
        ("survival_at('curve', [7, 7])", "spellcurve.survival_at: durations names 7 twice; name it once"),
        ("survival_at('curve', '7')", "durations is '7'; it must be a whole number of at least 0"),
        ("survival_at('curve', -1)", "durations is -1; it must be a whole number of at least 0"),
        ("survival_at('curve', [])", "durations is []; it must be a value or a list of values"),
        (
            "survival_at('curve', 7, by='status')",
            "by names the column 'status', which the result uses itself",
        ),
        ("survival_at('curve', 7, unit='day')", "unknown argument 'unit'; it takes curve, durations, by"),
        ("survival_quantiles('curve', 50)", "shares is 50; it must be a number between 0 and 1"),
        ("survival_quantiles('curve', [0.5, 0.5])", "shares names 0.5 twice"),
        ("restricted_mean('curve')", "argument 'horizon' is missing; give a number"),
        ("restricted_mean('curve', 0)", "horizon is 0; it must be a whole number of at least 1"),
        (
            "restricted_mean('curve', 30, survived=30)",
            "horizon is 30; it must be a whole number of at least 31",
        ),
        ("survival_beyond('curve')", "argument 'survived' is missing; give a number"),
        (
            "survival_beyond('curve', 3, interval_scale='square')",
            "interval_scale is 'square'; it must be one of",
        ),
        ("cohort_readout('spells', durations=7)", "argument 'cohort' is missing; give the name of a column"),
        ("cohort_readout('spells', 'plan', 7, period='week')", "period is 'week'; it must be one of 'month'"),
        (
            "cohort_readout('spells', 'plan', 7, by='spells')",
            "by names the column 'spells', which the result",
        ),
        ("hazard_by_band('spells')", "argument 'width' is missing; give a number"),
        ("hazard_by_band('spells', width=0)", "width is 0; it must be a whole number of at least 1"),
        (
            "survival_curve('spells', simultaneous='nair')",
            "simultaneous is 'nair'; it must be one of 'none', 'equal",
        ),
        (
            "survival_curve('spells', confidence=0.5, simultaneous=true)",
            "confidence is 0.5; with simultaneous bands",
        ),
    ],
)
def test_bad_arguments_stop_compilation_with_one_sentence(engine, call, sentence):
    with pytest.raises(CompilationError) as caught:
        engine.render(call)
    assert sentence in str(caught.value)


def test_a_forgotten_group_column_is_said_and_no_figure_made_up(engine):
    rows = [{"plan": plan, "entry": 0, "duration": 2, "event": 1, "weight": 1} for plan in ("a", "b")]
    engine.load("spells", WHOLE, rows)
    engine.make("curve", curve_call())
    for call, figure in [
        ("survival_at('curve', 1)", "survival"),
        ("survival_quantiles('curve')", "duration"),
        ("restricted_mean('curve', 1)", "restricted_mean"),
        ("survival_beyond('curve', 1)", "survival"),
    ]:
        for row in engine.run(call):
            assert (row["status"], row[figure]) == ("several_curves", None), call
