"""Differences, trends, events needed and shifts against exact arithmetic, lifelines and published figures."""

from __future__ import annotations

import math
from collections import defaultdict
from datetime import date, datetime, timedelta
from fractions import Fraction
from pathlib import Path
from random import Random
from typing import Any

import lifelines.datasets
import pytest
from dbt_common.events.base_types import EventMsg
from harness import CompilationError, Engine
from hypothesis import example, given, settings
from hypothesis import strategies as st
from lifelines import KaplanMeierFitter
from lifelines.statistics import logrank_test, survival_difference_at_fixed_point_in_time_test
from lifelines.utils import restricted_mean_survival_time
from scipy.integrate import quad
from scipy.stats import chi2
from spellcurve import exact, exact_differences, group_spells
from spellcurve.exact import Spell
from spellcurve.rebuild import completed_units
from strategies import GROUPS, spell_rows
from test_consumer import copied_to, failures

TOLERANCE = 1e-10
WHOLE = {
    "plan": "text",
    "branch": "text",
    "entry": "bigint",
    "duration": "bigint",
    "event": "bigint",
    "weight": "bigint",
}
FRACTIONAL = WHOLE | {"weight": "double"}
DATED = WHOLE | {"started_at": "date", "last_seen_at": "date"}
DURATIONS = [0, 1, 3, 7, 12, 13, 40]
HORIZONS = [1, 4, 12, 20]
CURVES: list[dict[str, Any]] = [
    {},
    {"grid": "every"},
    {"minimum_at_risk": 4},
    {"minimum_at_risk": 3, "small_counts": "hide"},
    {"horizon": 6},
]
FIGURES = (
    "difference",
    "std_error",
    "difference_lower",
    "difference_upper",
    "ratio",
    "ratio_lower",
    "ratio_upper",
)


@st.composite
def rows_in_branches(draw, fractional: bool = False):
    rows = draw(spell_rows(fractional=fractional))
    return [row | {"branch": draw(st.sampled_from([None, "north"]))} for row in rows]


def spells_of(rows: list[dict], *names: str) -> list[Spell]:
    return [
        Spell(
            row["entry"],
            row["duration"],
            row["event"],
            Fraction(row["weight"]),
            group=tuple(row[name] for name in names),
        )
        for row in rows
    ]


def close(actual: Any, expected: Any, tolerance: float = TOLERANCE, allowance: float = 1e-12) -> bool:
    """Whether a figure is right; the allowance is for differences of larger numbers."""
    if actual is None or expected is None:
        return actual is expected
    return abs(actual - float(expected)) <= tolerance * abs(float(expected)) + allowance


# Differences from a curve


def check_difference(row: dict, right: exact_differences.Difference, figure: str, size: float) -> None:
    """Compare a row; a p-value is that of a deviate whose last digits are those of a difference."""
    where = (row, right)
    assert row["status"] == right.status, where
    assert close(row[f"{figure}_a"], right.figure_a, allowance=0), where
    assert close(row[f"{figure}_b"], right.figure_b, allowance=0), where
    for name in FIGURES:
        assert close(row[name], getattr(right, name), allowance=1e-12 * size), (name, *where)
    for name in ("p_value", "ratio_p_value"):
        assert close(row[name], getattr(right, name), 1e-9, 1e-300), (name, *where)


def check_differences(engine: Engine, rows: list[dict], options: dict, scale: str, reference: str) -> None:
    making = "".join(f", {name}={value!r}" for name, value in options.items())
    making = f"survival_curve('spells', by=['branch', 'plan']{making})"
    at = (
        f"difference_at('curve', 'plan', {DURATIONS}, {reference!r}, by='branch', confidence=0.9,"
        f" test_scale={scale!r})"
    )
    within = f"difference_in_restricted_mean('curve', 'plan', {HORIZONS}, {reference!r}, by=['branch'])"
    engine.render_all([making, at, within])
    engine.load("spells", WHOLE, rows)
    engine.make("curve", making)
    curves = exact.survival_curves(group_spells(spells_of(rows, "branch", "plan")), **options)
    for call, place, asked, figure in [
        (at, "duration", DURATIONS, "survival"),
        (within, "horizon", HORIZONS, "restricted_mean"),
    ]:
        found = {(row["branch"], row["group_a"], row[place]): row for row in engine.run(call)}
        read = exact_differences.survival_figure if place == "duration" else exact_differences.mean_figure
        expected = {}
        for (branch, plan), curve in curves.items():
            for where in asked:
                if plan != reference:
                    other = curves.get((branch, reference))
                    expected[branch, plan, where] = exact_differences.difference(
                        read(curve, where),
                        other and read(other, where),
                        1 if place == "duration" else where,
                        0.9 if place == "duration" else 0.95,
                        scale if place == "duration" else "linear",
                    )
        assert found.keys() == expected.keys()
        for key, right in expected.items():
            assert found[key]["group_b"] == reference
            check_difference(found[key], right, figure, 1 if place == "duration" else key[2])


@given(
    rows=rows_in_branches(),
    options=st.sampled_from(CURVES),
    scale=st.sampled_from(exact.INTERVAL_SCALES),
    reference=st.sampled_from(["household", GROUPS[3], ""]),
)
@example(rows=[], options={}, scale="linear", reference="")
@settings(max_examples=250)
def test_differences_are_those_of_exact_arithmetic(engine, rows, options, scale, reference):
    check_differences(engine, rows, options, scale, reference)


def test_far_tails_keep_their_digits(engine):
    """Over half a million spells on each side, so that p-values go down to 1e-240 and to 0."""
    rows = [
        {"plan": plan, "branch": None, "entry": 0, "duration": t, "event": int(t < 12), "weight": weight}
        for plan, weights in {
            "household": [50_000] * 13,
            "individual": [50_000 + 24 * t**3 for t in range(13)],
            "": [50_000 + 300 * t for t in range(13)],
        }.items()
        for t, weight in enumerate(weights)
    ]
    for scale in exact.INTERVAL_SCALES:
        check_differences(engine, rows, {}, scale, "household")


def test_a_number_can_be_the_reference_and_nobody_is_carried_on(engine):
    engine.load("spells", {**WHOLE, "plan": "bigint"}, [
        {"plan": plan, "entry": 0, "duration": t, "event": event, "weight": 1}
        for plan, t, event in [(1, 2, 1), (1, 5, 1), (2, 2, 1), (2, 9, 0), (3, 1, 0)]
    ])  # fmt: skip
    engine.make("curve", "survival_curve('spells', by='plan')")
    found = {
        (row["group_a"], row["duration"]): (row["status"], row["survival_a"], row["survival_b"])
        for row in engine.run("difference_at('curve', 'plan', [2, 9, 100], reference=1)")
    }
    assert found == {
        ("2", 2): ("compared", 0.5, 0.5),
        ("2", 9): ("no_std_error", 0.5, 0.0),  # group 1 ended at 5: it is 0 for ever
        ("2", 100): ("beyond_follow_up", None, None),
        ("3", 2): ("beyond_follow_up", None, None),
        ("3", 9): ("beyond_follow_up", None, None),
        ("3", 100): ("beyond_follow_up", None, None),
    }
    engine.make("curve", "survival_curve('spells', by='plan')")
    for call in (
        "difference_at('curve', 'plan', 2, reference=7)",
        "difference_in_restricted_mean('curve', 'plan', 2, reference='7')",
    ):
        assert [row["status"] for row in engine.run(call)] == ["reference_not_found"] * 3


def test_a_curve_of_more_groups_than_are_named_is_said(engine):
    engine.load("spells", WHOLE, [
        {"plan": plan, "branch": branch, "entry": 0, "duration": 4, "event": 1, "weight": 1}
        for plan, branch in [("a", "north"), ("a", "south"), ("b", "north")]
    ])  # fmt: skip
    engine.make("curve", "survival_curve('spells', by=['plan', 'branch'])")
    for call in (
        "difference_at('curve', 'plan', 2, reference='a')",
        "difference_in_restricted_mean('curve', 'plan', 2, reference='a')",
    ):
        assert [(row["group_a"], row["status"]) for row in engine.run(call)] == [("b", "several_curves")]


@given(
    rows=st.lists(
        st.tuples(
            st.sampled_from("ab"),
            st.integers(0, 5),
            st.integers(1, 15),
            st.integers(0, 1),
            st.sampled_from([1, 1, 2, 5]),
        ),
        min_size=6,
        max_size=50,
    )
)
@settings(max_examples=60)
def test_lifelines_agrees(engine, rows):
    table = [
        {"plan": plan, "entry": entry, "duration": entry + lasted, "event": event, "weight": weight}
        # where a risk set runs empty lifelines refuses the table, and without a start its mean begins later
        for plan, entry, lasted, event, weight in [*rows, ("a", 0, 20, 0, 1), ("b", 0, 20, 0, 1)]
    ]
    engine.load("spells", WHOLE, table)
    engine.make("curve", "survival_curve('spells', by='plan')")
    fitted = {}
    for plan in "ab":
        own = [row for row in table if row["plan"] == plan]
        names = ("duration", "event", "entry", "weight")
        durations, events, entries, weights = ([row[name] for row in own] for name in names)
        fitted[plan] = KaplanMeierFitter().fit(durations, events, entry=entries, weights=weights)
    at = engine.run("difference_at('curve', 'plan', range(1, 16) | list, 'b', test_scale='log-log')")
    means = engine.run("difference_in_restricted_mean('curve', 'plan', [3, 8, 15], 'b')")
    compared = [row for row in at if row["status"] == "compared" and row["p_value"] is not None]
    for row in compared:
        assert close(row["survival_a"], fitted["a"].predict(row["duration"]), 1e-9)
        t = row["duration"]
        # between two observed durations lifelines interpolates the variance
        if all(t in fit.survival_function_.index for fit in fitted.values()):
            theirs = survival_difference_at_fixed_point_in_time_test(t, fitted["a"], fitted["b"])
            assert close(row["p_value"], theirs.p_value, 1e-9)
    for row in means:
        theirs = [restricted_mean_survival_time(fitted[plan], row["horizon"]) for plan in "ab"]
        assert row["status"] == "compared" and close(row["difference"], theirs[0] - theirs[1], 1e-9, 1e-9)


# Published figures for differences


def remission() -> list[dict]:
    """Weeks in remission of Freireich, E. J., Gehan, E., Frei, E. et al. (1963), Blood 21, 699-716."""
    leukemia = lifelines.datasets.load_leukemia()
    return [
        {
            "plan": "6-MP" if row.Rx == 0 else "placebo",
            "entry": 0,
            "duration": int(row.t),
            "event": int(row.status),
            "weight": 1,
        }
        for row in leukemia.itertuples()
    ]


def test_remissions_at_ten_weeks(engine):
    """Freireich et al. 1963. Survival at 10 weeks is printed as .753 with a standard error of .0963 (6-MP)
    and .381 with .1060 (placebo), as in Klein and Moeschberger 2003 and Collett 2003; from memory. What
    follows from them: a difference of .372 with a standard error of .1432.
    """
    engine.load("spells", WHOLE, remission())
    engine.make("curve", "survival_curve('spells', by='plan')")
    [row] = engine.run("difference_at('curve', 'plan', 10, 'placebo')")
    assert (row["group_a"], row["status"]) == ("6-MP", "compared")
    assert (round(row["survival_a"], 3), round(row["survival_b"], 3)) == (0.753, 0.381)
    error = math.hypot(0.0963, 0.1060)
    assert abs(row["std_error"] - error) < 1e-4
    assert abs(row["difference_lower"] - (0.753 - 0.381 - 1.96 * error)) < 1e-3
    assert abs(row["difference_upper"] - (0.753 - 0.381 + 1.96 * error)) < 1e-3
    z = (0.753 - 0.381) / error
    assert abs(row["p_value"] - math.erfc(z / 2**0.5)) < 1e-4


def test_remissions_maintained_or_not(engine):
    """Embury et al. 1977, within 161 weeks. Statistical software prints the restricted means 52.6 with a
    standard error of 19.8 and 22.7 with 4.18 for these 23 patients; from memory.
    """
    maintained = [9, 13, -13, 18, 23, -28, 31, 34, -45, 48, -161]
    others = [5, 5, 8, 8, 12, -16, 23, 27, 30, 33, 43, 45]
    engine.load("spells", WHOLE, [
        {"plan": plan, "entry": 0, "duration": abs(t), "event": int(t > 0), "weight": 1}
        for plan, weeks in [("maintained", maintained), ("not", others)]
        for t in weeks
    ])  # fmt: skip
    engine.make("curve", "survival_curve('spells', by='plan')")
    [row] = engine.run("difference_in_restricted_mean('curve', 'plan', 161, 'not')")
    assert (round(row["restricted_mean_a"], 1), round(row["restricted_mean_b"], 1)) == (52.6, 22.7)
    assert abs(row["difference"] - 29.9) < 0.1 and abs(row["std_error"] - math.hypot(19.8, 4.18)) < 0.06


# Trends


SCORES = {None: 7, "household": -1, "individual": 2.5, GROUPS[3]: 2.5, "": 0}
WEIGHTINGS = ["log-rank", "gehan", "tarone-ware", "peto", "modified-peto", "fleming-harrington(0.5, 1)"]


def trend_call(between: str = "plan", **options: Any) -> str:
    given_options = "".join(f", {name}={value!r}" for name, value in options.items())
    return f"trend_test('spells', {between!r}{given_options})".replace("None:", "none:")


def check_trend(row: dict, right: exact_differences.Trend) -> None:
    where = (row, right)
    for name in ("status", "group_count"):
        assert row[name] == getattr(right, name), where
    assert row["degrees_of_freedom"] == (1 if right.status == "compared" else None)
    assert close(row["z"], right.z) and close(row["statistic"], right.statistic), where
    if right.statistic is None:
        assert row["p_value"] is None and row["direction"] is None and row["hazard_ratio"] is None
        return
    assert close(row["p_value"], chi2.sf(row["statistic"], 1), allowance=0)
    if float(right.statistic) > 1e-20:
        assert row["direction"] == right.direction, where
    for name in ("hazard_ratio", "hazard_ratio_lower", "hazard_ratio_upper"):
        log = abs(math.log(getattr(right, name)))
        assert close(row[name], getattr(right, name), TOLERANCE * max(1, log), 0), (name, *where)


@given(
    rows=st.one_of(rows_in_branches(), rows_in_branches(fractional=True)),
    weighting=st.sampled_from(WEIGHTINGS),
    stratified=st.booleans(),
)
@example(rows=[], weighting="log-rank", stratified=True)
@settings(max_examples=250)
def test_trends_are_those_of_exact_arithmetic(engine, rows, weighting, stratified):
    strata = ["branch"] if stratified else []
    engine.load("spells", FRACTIONAL, rows)
    found = engine.run(trend_call(scores=SCORES, weighting=weighting, strata=strata))
    scores = {group: Fraction(score) for group, score in SCORES.items()}
    right = exact_differences.trend_test(spells_of(rows, "plan", *strata), scores, weighting)
    assert len(found) == (right is not None)
    if right is not None:
        check_trend(found[0], right)


@given(rows=rows_in_branches())
@settings(max_examples=80)
def test_scores_in_order_and_trends_within_branches(engine, rows):
    engine.load("spells", WHOLE, rows)
    order = ["", "individual", None, "household"]
    call = trend_call(scores=order, by="branch").replace("None", "none")
    found = {row["branch"]: row for row in engine.run(call)}
    by_branch = defaultdict(list)
    for row in rows:
        by_branch[row["branch"]].append(row)
    assert found.keys() == by_branch.keys()
    for branch, own in by_branch.items():
        scores = {group: place for place, group in enumerate(order, start=1)}
        check_trend(found[branch], exact_differences.trend_test(spells_of(own, "plan"), scores))


@given(
    rows=st.lists(
        st.tuples(st.integers(1, 2), st.integers(0, 9), st.integers(0, 1), st.sampled_from([1, 1, 3])),
        min_size=3,
        max_size=40,
    )
)
@settings(max_examples=60)
def test_a_trend_of_two_groups_is_their_log_rank(engine, rows):
    """As lifelines computes it, and whatever the two numbers are."""
    table = [
        {"plan": plan, "entry": 0, "duration": t, "event": event, "weight": weight}
        for plan, t, event, weight in rows
    ]
    engine.load("spells", WHOLE | {"plan": "bigint"}, table)
    straight, turned = (engine.run(call)[0] for call in (trend_call(), trend_call(scores={1: 2012.5, 2: -4})))
    if straight["status"] != "compared":
        assert turned["status"] == straight["status"] != "group_without_score"
        return
    assert close(turned["statistic"], straight["statistic"], 1e-9) and close(
        turned["z"], -straight["z"], 1e-9
    )
    names = ("duration", "event", "weight")
    a, b = (
        [[row[name] for row in table if row["plan"] == plan] for name in names] for plan in (1, 2)
    )  # fmt: skip
    theirs = logrank_test(a[0], b[0], a[1], b[1], weights_A=a[2], weights_B=b[2])
    assert close(straight["statistic"], theirs.test_statistic, 1e-9, 1e-9)


def test_stages_of_cancer_of_the_larynx(engine):
    """Kardaun, O. (1983), Statistica Neerlandica 37, 103-125: 90 men at four stages. Klein and Moeschberger
    2003, section 7.4, print Z = 3.72 for the trend with scores 1 to 4; from memory.
    """
    engine.load("spells", WHOLE | {"plan": "bigint"}, [
        {
            "plan": 1 + row.Stage_II + 2 * row.Stage_III + 3 * row.Stage_IV,
            "entry": 0, "duration": round(10 * row.time), "event": int(row.death), "weight": 1,
        }
        for row in lifelines.datasets.load_larynx().itertuples()
    ])  # fmt: skip
    [row] = engine.run("trend_test('spells', 'plan')")
    assert (round(row["z"], 2), row["group_count"], row["direction"]) == (3.72, 4, "sooner")


@pytest.mark.parametrize(
    ("kind", "values", "status"),
    [
        ("text", ["1", "02", "3.5", "1e1"], "compared"),
        ("double", [0.25, 1e6, -3.0, 0.1], "compared"),
        ("text", ["1", "2", "3", "none at all"], "group_without_score"),
        ("bigint", [1, 2, 3, None], "group_without_score"),
        ("bigint", [5, 5, 5, 5], "one_group"),
    ],
)
def test_the_groups_own_numbers_are_their_scores(engine, kind, values, status):
    rows = [
        {"plan": value, "entry": 0, "duration": 1 + 3 * place % 7, "event": 1, "weight": 2}
        for place, value in enumerate(values * 3)
    ]
    engine.load("spells", FRACTIONAL | {"plan": kind}, rows)
    [row] = engine.run("trend_test('spells', 'plan')")
    assert row["status"] == status
    if status == "compared":
        scores = {value: Fraction(float(value)) for value in values}
        check_trend(row, exact_differences.trend_test(spells_of(rows, "plan"), scores))


def test_trends_that_cannot_be_told(engine):
    def told(*spells: tuple) -> str:
        names = ("plan", "entry", "duration", "event")
        engine.load(
            "spells",
            WHOLE | {"plan": "bigint"},
            [dict(zip(names, spell, strict=True)) | {"weight": 1} for spell in spells],
        )
        [row] = engine.run("trend_test('spells', 'plan')")
        return row["status"]

    assert told((1, 0, 3, 1), (2, 3, 5, 1), (2, 3, 6, 1)) == "nothing_to_compare"
    assert told((1, 0, 3, 0), (2, 0, 5, 0)) == "no_events"
    assert told(*((number, 0, 1 + number % 7, 1) for number in range(51))) == "too_many_groups"
    assert told(*((number, 0, 1 + number % 7, 1) for number in range(50))) == "compared"


# Events needed


@pytest.mark.parametrize(
    ("call", "needed"),
    [
        # what tables and programs print for Schoenfeld 1981, two-sided at 5%, groups of one size; from memory
        ("1.5", 191),
        ("1.5, power=0.9", 256),
        ("2", 66),
        ("2, power=0.9", 88),
        ("0.5", 66),
        ("1.25", 631),
    ],
)
def test_events_needed_are_those_printed(engine, call, needed):
    [row] = engine.run(f"events_needed({call})")
    assert row["events_needed"] == needed


def test_the_deaths_that_a_trial_of_hepatitis_needs(engine):
    """Collett, D. (2003), Modelling Survival Data in Medical Research, 2nd ed., chapter 10: 133 deaths for a
    hazard ratio of 0.57, 5% two-sided, power 90%; from memory. It is 133.01 before it is rounded.
    """
    [row] = engine.run("events_needed(hazard_ratio=0.57, power=0.9)")
    assert round(row["events_exact"]) == 133 and row["events_needed"] == 134


def test_events_needed_for_any_options(engine):
    asked = [
        {"hazard_ratio": ratio, "power": power, "alpha": alpha, "allocation": allocation, "sides": sides}
        for ratio in (0.01, 0.7, 0.999, 1.0001, 1.3, 40)
        for power in (0.5, 0.8, 0.9999)
        for alpha in (1e-12, 0.01, 0.4)
        for allocation, sides in ((0.5, 2), (0.05, 1))
    ]
    calls = [
        "events_needed(" + ", ".join(f"{name}={value!r}" for name, value in options.items()) + ")"
        for options in asked
    ]
    engine.render_all(calls)
    for options, call in zip(asked, calls, strict=True):
        [row] = engine.run(call)
        right = exact_differences.events_needed(**options)
        assert close(row["events_exact"], right, 1e-10, 0), options
        assert row["events_needed"] == math.ceil(row["events_exact"])
        assert {name: row[name] for name in options} == options


# Time to the events needed


@given(
    rows=rows_in_branches(),
    options=st.fixed_dictionaries(
        {
            "hazard_ratio": st.sampled_from([0.2, 3, 12]),
            "intake": st.sampled_from([0.125, 4, 100]),
            "allocation": st.sampled_from([0.5, 0.25]),
            "intake_lasts": st.sampled_from([None, 1, 30]),
        }
    ),
)
@example(
    rows=[
        {"plan": "a", "branch": None, "entry": 0, "duration": 10**6, "event": e, "weight": 1} for e in (0, 1)
    ],
    options={"hazard_ratio": 3, "intake": 100, "allocation": 0.5, "intake_lasts": 30},
)
@settings(max_examples=100)
def test_times_are_those_of_exact_arithmetic(engine, rows, options):
    engine.load("spells", WHOLE, rows)
    given_options = "".join(f", {name}={value!r}" for name, value in options.items() if value is not None)
    call = f"time_to_events_needed('spells', by=['plan'], longest=120{given_options})"
    found = {row["plan"]: row for row in engine.run(call)}
    needed = exact_differences.events_needed(options["hazard_ratio"], allocation=options["allocation"])
    own = group_spells(spells_of(rows, "plan"))
    assert found.keys() == {plan for (plan,) in own}
    for (plan,), spells in own.items():
        right = exact_differences.time_to_events_needed(
            spells,
            needed,
            options["hazard_ratio"],
            Fraction(options["intake"]),
            options["allocation"],
            options["intake_lasts"],
            120,
        )
        row = found[plan]
        for name in ("events_needed", "duration", "status"):
            assert row[name] == getattr(right, name), (name, row, right)
        for name in ("hazard", "intake", "spells_needed"):
            assert close(row[name], getattr(right, name), allowance=0), (name, row, right)


def test_the_intake_is_that_of_the_table(engine):
    """From the first spell watched from its start to the last moment that anybody of the table was seen."""
    rows = [
        {"plan": plan, "started_at": date(2026, 1, day), "last_seen_at": date(2026, 1, end),
         "entry": entry, "duration": end - day, "event": 1, "weight": weight}
        for plan, day, end, entry, weight in [
            ("a", 11, 14, 0, 3), ("a", 13, 20, 0, 1), ("a", 1, 12, 9, 5), ("b", 21, 31, 0, 1),
            (None, 31, 31, 0, 2)
        ]
    ]  # fmt: skip
    engine.load("spells", DATED, rows)
    found = {
        row["plan"]: row
        for row in engine.run("time_to_events_needed('spells', 8, by='plan', longest=9)")
    }  # fmt: skip
    assert close(found["a"]["intake"], Fraction(4, 20)) and close(found["b"]["intake"], Fraction(1, 10))
    assert close(found["a"]["hazard"], Fraction(9, 3 * 3 + 7 + 5 * 2))
    assert {plan: row["status"] for plan, row in found.items()} == {
        "a": "not_within_longest",
        "b": "not_within_longest",
        None: "no_time_at_risk",
    }
    [row] = engine.run("time_to_events_needed('spells', 8, unit='week', longest=9)")
    assert close(row["intake"], Fraction(7, 2))  # from 11 to 31 January: two completed weeks
    engine.load("spells", DATED, [row | {"started_at": None, "last_seen_at": None} for row in rows[:1]])
    [row] = engine.run("time_to_events_needed('spells', 8)")
    assert (row["status"], row["intake"]) == ("no_intake", None)
    engine.load("spells", DATED, [row | {"event": 0} for row in rows[:1]])
    assert [row["status"] for row in engine.run("time_to_events_needed('spells', 8)")] == ["no_events"]
    engine.load("spells", DATED, [])
    assert [row["status"] for row in engine.run("time_to_events_needed('spells', 8)")] == ["no_time_at_risk"]
    assert engine.run("time_to_events_needed('spells', 8, by='plan')") == []


def test_the_events_expected_are_the_integral_over_the_intake(engine):
    """Rubinstein, Gail and Santner 1981: each spell taken in at u has had the event by T with probability
    1 - exp(-h (T - u)). The first whole T at which the integral reaches the need is the answer.
    """
    rows = [
        {"plan": "a", "entry": 0, "duration": 50, "event": int(place < 3), "weight": 1} for place in range(10)
    ]
    engine.load("spells", WHOLE, rows)
    [row] = engine.run("time_to_events_needed('spells', 1.8, intake=2.5, intake_lasts=45, allocation=0.3)")
    needed = math.ceil(exact_differences.events_needed(1.8, allocation=0.3))

    def expected(until: float) -> float:
        def ended(u: float) -> float:
            return sum(
                share * (1 - math.exp(-hazard * (until - u)))
                for share, hazard in ((0.3, 0.0108), (0.7, 0.006))
            )

        return 2.5 * quad(ended, 0, min(until, 45))[0]

    assert row["status"] == "reached" and row["events_needed"] == needed
    assert expected(row["duration"] - 1) < needed <= expected(row["duration"])
    assert row["spells_needed"] == 2.5 * min(row["duration"], 45)


# Shifts


CUTOFF, FIRST, LAST = date(2026, 3, 1), date(2026, 1, 10), date(2026, 4, 1)


@st.composite
def dated_rows(draw, unit: str = "day"):
    rows = []
    for _ in range(draw(st.integers(0, 30))):
        start = date(2025, 12, 20) + timedelta(days=draw(st.integers(0, 100)))
        end = start + timedelta(days=draw(st.integers(0, 40)))
        duration = completed_units(at_midnight(start), at_midnight(end), unit)
        rows.append(
            {
                "plan": None,
                "branch": draw(st.sampled_from(["north", None])),
                "started_at": start,
                "last_seen_at": end,
                "entry": draw(st.integers(0, duration)) if draw(st.booleans()) else 0,
                "duration": duration,
                "event": draw(st.integers(0, 1)),
                "weight": draw(st.sampled_from([1, 2, 30])),
            }
        )
    return rows


def at_midnight(day: date) -> datetime:
    return datetime(day.year, day.month, day.day)


def parts(row: dict, compare: str, first: date | None, unit: str) -> list[Spell]:
    """Cut a spell unit by unit: the side of each is that of the period in which it was completed.

    Each part is as long as the units of its side last.
    """
    start, strata = row["started_at"], (row["branch"],)
    entry, duration = row["entry"], row["duration"]
    if not (entry < duration or duration == 0):
        return []

    def part(side: int, own_entry: int, own_end: int) -> Spell:
        event = row["event"] if own_end == duration else 0
        return Spell(own_entry, own_end, event, Fraction(row["weight"]), group=(side, *strata))

    if compare == "cohorts":
        side = int(start >= CUTOFF)
        return [] if first and start < first else [part(side, entry, duration)]

    def side_of(unit_number: int) -> int | None:
        """1 recent, 0 baseline, None before the baseline."""
        at_cutoff = completed_units(at_midnight(start), at_midnight(CUTOFF), unit) if start < CUTOFF else 0
        at_first = (
            completed_units(at_midnight(start), at_midnight(first), unit) if first and start < first else 0
        )
        if at_cutoff <= 0 or unit_number > at_cutoff:
            return 1
        if at_first > 0 and unit_number <= at_first:
            return None
        return 0

    if duration == 0:
        return [] if side_of(0) is None else [part(side_of(0) or 0, 0, 0)]
    units = {unit_number: side_of(unit_number) for unit_number in range(entry + 1, duration + 1)}
    found = []
    for side in (0, 1):
        own = [unit_number for unit_number, place in units.items() if place == side]
        if own:
            watched_from_start = min(own) == 1
            found.append(part(side, 0 if watched_from_start else min(own) - 1, max(own)))
    return found


@given(
    data=st.data(),
    compare=st.sampled_from(["periods", "cohorts"]),
    first=st.sampled_from([None, FIRST]),
    unit=st.sampled_from(["day", "day", "week", "month"]),
    stratified=st.booleans(),
)
@settings(max_examples=300)
def test_a_shift_is_that_of_spells_cut_unit_by_unit(engine, data, compare, first, unit, stratified):
    rows = data.draw(dated_rows(unit))
    engine.load("spells", DATED, rows)
    call = (
        f"test_survival_has_not_shifted('spells', recent='{CUTOFF}', at=3, compare='{compare}',"
        f" alpha=0.999999, as_of='{LAST}', unit='{unit}'"
        + (f", baseline='{first}'" if first else "")
        + (", strata=['branch']" if stratified else "")
        + ")"
    )
    found = engine.run(call)
    cut = [part for row in rows for part in parts(row, compare, first, unit)]
    if not stratified:
        cut = [Spell(p.entry, p.duration, p.event, p.weight, group=p.group[:1]) for p in cut]
    sides = [[p for p in cut if p.group[0] == side] for side in (0, 1)]
    if not all(sides):
        missing = f"since {CUTOFF}" if not sides[1] else f"between {first}" if first else f"before {CUTOFF}"
        assert [row["problem"].startswith("Nobody was under observation " + missing) for row in found] == [
            True
        ]
        return
    right = exact_differences.trend_test(cut, {0: 0, 1: 1})
    assert right is not None
    if right.p_value is None or right.p_value >= 0.99999:
        assert right.p_value is not None or found == []
        return
    [row] = found
    assert close(row["p_value"], right.p_value, 1e-9) and close(row["statistic"], right.statistic)
    assert close(row["hazard_ratio"], right.hazard_ratio, 1e-9)
    assert f"The event comes {right.direction} " in row["problem"]
    for side, name in enumerate(("baseline", "recent")):
        own = [Spell(p.entry, p.duration, p.event, p.weight) for p in sides[side]]
        survival = exact_differences.survival_figure(exact.survival_curve(own), 3).value
        assert close(row[f"survival_{name}"], survival)
        shown = "not known" if survival is None else percent(row[f"survival_{name}"])
        assert f" {'was' if name == 'baseline' else 'is'} {shown}" in row["problem"], row
        assert close(row[f"events_{name}"], sum(p.weight * p.event for p in sides[side]))
        assert close(row[f"spells_{name}"], sum(p.weight for p in sides[side]))


def percent(share: float) -> str:
    tenths = math.floor(1000 * share + 0.5)
    return f"{tenths // 10}.{tenths % 10}%"


def members(change: float, seed: int = 3) -> list[dict]:
    """800 memberships that last 90 days on average, and from March 2026 on longer or shorter by a factor."""
    dice, rows = Random(seed), []
    for _ in range(800):
        start = date(2025, 3, 1) + timedelta(days=dice.randrange(395))
        lasts = dice.expovariate(1 / 90)
        before = (CUTOFF - start).days
        if before < lasts:
            lasts = max(before, 0) + (lasts - max(before, 0)) * change
        end = min(start + timedelta(days=int(lasts)), LAST)
        rows.append(
            {
                "plan": "a", "branch": "north", "started_at": start, "last_seen_at": end, "entry": 0,
                "duration": (end - start).days, "event": int(start + timedelta(days=int(lasts)) < LAST),
                "weight": 1,
            }
        )  # fmt: skip
    return rows


@pytest.mark.parametrize(("change", "direction"), [(0.4, "sooner"), (1, None), (4, "later")])
def test_a_shift_is_found_and_said(engine, change, direction):
    engine.load("spells", DATED, members(change))
    # 31 days before 1 April is 1 March
    found = engine.run("test_survival_has_not_shifted('spells', recent=31, as_of='2026-04-01', at=30)")
    if direction is None:
        assert found == []
        return
    [row] = found
    assert list(row) == [
        "problem", "duration", "survival_recent", "survival_baseline", "difference", "spells_recent",
        "spells_baseline", "events_recent", "events_baseline", "statistic", "p_value", "hazard_ratio",
    ]  # fmt: skip
    p = "p < 0.0001" if row["p_value"] < 0.0001 else f"p = {row['p_value']:.4f}"
    assert row["problem"] == (
        f"The event comes {direction} since 2026-03-01 than before: survival at day 30 is"
        f" {percent(row['survival_recent'])} and was {percent(row['survival_baseline'])} (log-rank, {p})."
    )
    assert (row["difference"] < 0) == (direction == "sooner") == (row["hazard_ratio"] > 1)


def test_spells_without_dates_and_sides_without_spells_are_said(engine):
    rows = members(1)[:20]
    engine.load("spells", DATED, [*rows, *({**row, "started_at": None} for row in rows[:3])])
    for compare in ("periods", "cohorts"):
        call = (
            f"test_survival_has_not_shifted('spells', '2026-03-01', as_of='2026-04-01', compare='{compare}')"
        )
        [row] = engine.run(call)
        assert row["problem"] == (
            "3 spells have no started_at, so that they belong to no period; give a spell table with dates."
        )
        engine.load("nothing", DATED, [])
        [row] = engine.run(call.replace("'spells'", "'nothing'"))
        assert row["problem"] == "Nobody was under observation since 2026-03-01, so nothing can be compared."


def test_hours_are_counted_back_in_hours(engine):
    started = [datetime(2026, 3, 1, hour) for hour in range(24)]
    rows = [
        {"started_at": start, "last_seen_at": start + timedelta(hours=1 + 9 * late), "entry": 0,
         "duration": 1 + 9 * late, "event": 1, "weight": 5}
        for start in started
        for late in [int(start.hour >= 14)]
    ]  # fmt: skip
    columns = WHOLE | {"started_at": "moment", "last_seen_at": "moment"}
    engine.load("spells", columns, rows)
    [row] = engine.run(
        "test_survival_has_not_shifted('spells', recent=10, as_of='2026-03-02', unit='hour', at=2,"
        " compare='cohorts', baseline=6)"
    )
    assert row["problem"] == (
        "The event comes later for spells begun since 2026-03-01 14:00:00 than between 2026-03-01 08:00:00"
        " and 2026-03-01 14:00:00: survival at hour 2 is 100.0% and was 0.0% (log-rank, p < 0.0001)."
    )
    assert (row["spells_recent"], row["spells_baseline"]) == (50, 30)


SHIFT_MODEL = "select * from {{ ref('membership_spells') }}"
SHIFT_TESTS = """
models:
  - name: shifted_spells
    data_tests:
      - spellcurve.survival_has_not_shifted:
          name: shift_warned_of
          arguments: {recent: 2023-06-01, as_of: 2024-07-01, alpha: 0.999999, at: 60}
          config: {severity: warn}
      - spellcurve.survival_has_not_shifted:
          name: shift_kept
          arguments: {recent: '2023-06-01', as_of: '2024-07-01', alpha: 0.999999, say: false}
          config: {store_failures: true}
      - spellcurve.survival_has_not_shifted:
          name: no_shift
          arguments: {recent: '2023-06-01', as_of: '2024-07-01', alpha: 0.000000000001}
"""


def test_the_sentence_reaches_the_log_and_the_stored_failures(tmp_path: Path, monkeypatch):
    repo = copied_to(tmp_path / "repo", monkeypatch)
    repo.write("models/shifts/shifted_spells.sql", SHIFT_MODEL)
    repo.write("models/shifts/shifts.yml", SHIFT_TESTS)
    said: list[str] = []

    def keep(event: EventMsg) -> None:
        said.append(event.info.msg)

    result = repo.dbt("build", "--select", "+shifted_spells", on_event=keep)
    statuses = {node.node.name: str(node.status) for node in result.result}
    assert (statuses["shift_warned_of"], statuses["shift_kept"], statuses["no_shift"]) == (
        "warn",
        "fail",
        "pass",
    ), failures(result)
    sentences = [line for line in said if line.startswith("survival_has_not_shifted on shifted_spells: ")]
    assert len(sentences) == 1 and " since 2023-06-01 than before: survival at day 60 is " in sentences[0]
    import duckdb

    with duckdb.connect(str(repo.folder / "harrow_lane.duckdb")) as connection:
        [(kept,)] = connection.sql("select problem from analytics_dbt_test__audit.shift_kept").fetchall()
    assert kept.startswith("The event comes ") and "survival at day 30 is" in kept


# Wrong calls


@pytest.mark.parametrize(
    ("call", "sentence"),
    [
        (
            "difference_at('c', 'plan', 3)",
            "groups are compared with one of them, which needs a reference; give one of the group",
        ),
        (
            "difference_at('c', 'plan', 3, 'a', horizon=3)",
            "unknown argument 'horizon'; it takes curve, between",
        ),
        ("difference_at('c', 'plan', -3, 'a')", "durations is -3; it must be a whole number of at least 0."),
        ("difference_at('c', 'plan', [3, 3], 'a')", "durations names 3 twice; name it once."),
        ("difference_at('c', 'plan', 3, true)", "reference is True; it must be one of the group values"),
        ("difference_at('c', 'plan', 3, 'a', by='plan')", "by names the column 'plan', which between names"),
        (
            "difference_at('c', 'plan', 3, 'a', by='ratio')",
            "by names the column 'ratio', which the result uses itself; rename it before.",
        ),
        ("difference_at('c', ['plan'], 3, 'a')", "between is ['plan']; it must be the name of a column."),
        (
            "difference_at('c', 'plan', 3, 'a', test_scale='probit')",
            "test_scale is 'probit'; it must be one of 'linear', 'log', 'log-log', 'logit', 'arcsine'.",
        ),
        (
            "difference_at('c', 'plan', 3, 'a', confidence=95)",
            "confidence is 95; it must be a number between",
        ),
        ("difference_in_restricted_mean('c', 'plan')", "argument 'horizon' is missing; give a number."),
        (
            "difference_in_restricted_mean('c', 'plan', 0, 'a')",
            "horizon is 0; it must be a whole number of at least 1.",
        ),
        (
            "difference_in_restricted_mean('c', 'plan', 9, 'a', by='restricted_mean')",
            "by names the column 'restricted_mean', which the result uses itself",
        ),
        ("trend_test('s')", "argument 'between' is missing; give the name of a column."),
        (
            "trend_test('s', 'plan', scores='score')",
            "scores is 'score'; it must be a list of groups in their order, or a mapping of each group to a",
        ),
        ("trend_test('s', 'plan', scores=['a'])", "scores names 1 groups; a trend needs two at least."),
        ("trend_test('s', 'plan', scores=['a', 'a'])", "scores names the group 'a' twice; name it once."),
        ("trend_test('s', 'plan', scores=[['a'], 'b'])", "scores names the group ['a']; a group is a text,"),
        (
            "trend_test('s', 'plan', scores={'a': 1, 'b': 'high'})",
            "scores gives the group 'b' the score 'high'; it must be a number.",
        ),
        ("trend_test('s', 'plan', weighting='wilcoxon')", "weighting is 'wilcoxon'; it must be one of"),
        ("events_needed()", "argument 'hazard_ratio' is missing; give a number."),
        ("events_needed(1)", "hazard_ratio is 1; it must be a number above 0 that is not 1"),
        ("events_needed('2')", "hazard_ratio is '2'; it must be a number above 0 that is not 1"),
        ("events_needed(2, power=80)", "power is 80; it must be a number between 0 and 1, both excluded."),
        ("events_needed(2, sides=3)", "sides is 3; it must be 1 or 2."),
        (
            "events_needed(2, power=0.01, alpha=0.05)",
            "power is 0.01, which chance alone gives at an alpha of 0.05",
        ),
        (
            "time_to_events_needed('s', 2, intake=0)",
            "intake is 0; it must be a number above 0, of spells that",
        ),
        (
            "time_to_events_needed('s', 2, intake_lasts=0)",
            "intake_lasts is 0; it must be a whole number of at",
        ),
        (
            "time_to_events_needed('s', 2, unit='year')",
            "unit is 'year'; it must be one of 'day', 'week', 'month'",
        ),
        ("time_to_events_needed('s', 2, longest=200000)", "longest is 200000; it must not be above 100000."),
        ("time_to_events_needed('s', 2, by='intake')", "by names the column 'intake', which the result uses"),
        (
            "test_survival_has_not_shifted('s')",
            "argument 'recent' is missing; give the date from which behaviour",
        ),
        (
            "test_survival_has_not_shifted('s', recent=0)",
            "recent is 0; it must be a whole number of at least 1.",
        ),
        (
            "test_survival_has_not_shifted('s', recent='May')",
            "recent is 'May'; it must be a date 'YYYY-MM-DD'",
        ),
        (
            "test_survival_has_not_shifted('s', recent='2026-05-01', as_of='2026-05-01')",
            "recent is '2026-05-01', which is not before as_of '2026-05-01 00:00:00'; it must be.",
        ),
        (
            "test_survival_has_not_shifted('s', '2026-05-01', as_of='2026-07-01', baseline='2026-06-01')",
            "baseline is '2026-06-01', which is not before the recent period, from '2026-05-01 00:00:00'; it",
        ),
        ("test_survival_has_not_shifted('s', 90, compare='plans')", "compare is 'plans'; it must be one of"),
        (
            "test_survival_has_not_shifted('s', 90, alpha=0)",
            "alpha is 0; it must be a number between 0 and 1",
        ),
        (
            "test_survival_has_not_shifted('s', 90, at='30')",
            "at is '30'; it must be a whole number of at least 0.",
        ),
        ("test_survival_has_not_shifted('s', 90, say='yes')", "say is 'yes'; it must be true or false."),
    ],
)
def test_bad_arguments_stop_compilation_with_one_sentence(engine, call, sentence):
    with pytest.raises(CompilationError) as caught:
        engine.render(call)
    name = call.split("(")[0].removeprefix("test_")
    assert f"spellcurve.{name}: {sentence}" in str(caught.value)
