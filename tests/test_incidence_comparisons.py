"""Gray's test and the cause-specific log-rank test."""

from __future__ import annotations

import csv
from pathlib import Path

import pytest
from harness import CompilationError
from hypothesis import example, given, settings
from scipy.stats import chi2
from spellcurve import exact_incidence
from test_incidence import WHOLE, close, in_groups, rows_with_causes

GRAY = "incidence_gray_test('spells', 'plan', ['moved', ''], most_groups=5)"
SEEDS = Path(__file__).resolve().parents[1] / "seeds" / "reference"


@given(rows=rows_with_causes())
@example(rows=[])
@settings(max_examples=200)
def test_gray_against_fractions(engine, rows):
    engine.load("spells", WHOLE, rows)
    found = engine.run(GRAY)
    if not rows:
        assert found == []
        return
    [row] = found
    groups = in_groups(rows, ["plan"])
    expected = exact_incidence.gray_test(list(groups.values()), ["moved", ""])
    own = [
        s for spells in groups.values() for s in spells if s.event and s.counts and s.cause in ("moved", "")
    ]
    if len(groups) == 1:
        assert row["status"] == "one_group" and row["statistic"] is None
    elif not own:
        assert row["status"] == "no_events" and row["statistic"] is None
    elif expected.statistic is None:
        assert row["status"] == "nothing_to_compare" and row["p_value"] is None
    else:
        freedom = expected.degrees_of_freedom
        assert row["degrees_of_freedom"] == freedom
        assert row["status"] == ("compared" if freedom == len(groups) - 1 else "fewer_degrees_of_freedom")
        assert close(row["statistic"], expected.statistic, 1e-9, 1e-12), (row, float(expected.statistic))
        assert close(row["p_value"], chi2.sf(row["statistic"], freedom), 1e-9)


@given(rows=rows_with_causes())
@settings(max_examples=60)
def test_the_cause_specific_log_rank_is_that_of_spells_with_other_causes_censored(engine, rows):
    engine.load("spells", WHOLE, rows)
    own = engine.run("incidence_log_rank_test('spells', 'plan', ['moved', ''], most_groups=5)")
    censored = [row | {"event": int(row["event"] == 1 and row["cause"] in ("moved", ""))} for row in rows]
    engine.load("spells", WHOLE, censored)
    found = engine.run("log_rank_test('spells', 'plan', most_groups=5)")
    assert len(own) == len(found)
    for row, right in zip(own, found, strict=True):  # two sums of floats, added up in any order
        for name, figure in right.items():
            if isinstance(figure, float):
                assert close(row[name], figure, 1e-11, 1e-13), (name, row, right)
            else:
                assert row[name] == figure, (name, row, right)


def melanoma() -> list[dict]:
    """205 patients operated on for melanoma, by ulceration; docs/sources.md says where they are from."""
    with (SEEDS / "reference_melanoma.csv").open(newline="") as file:
        return [
            {
                "plan": row["ulceration"],
                "entry": 0,
                "duration": int(row["duration"]),
                "event": int(row["event"]),
                "cause": row["cause"] or None,
                "weight": 1,
            }
            for row in csv.DictReader(file)
        ]


@pytest.mark.parametrize(("cause", "statistic"), [("melanoma", 26.120719), ("other", 0.158662)])
def test_gray_on_the_melanoma_patients(engine, cause, statistic):
    """Incidences by ulceration. Both statistics are those that the R package cmprsk gives (Gray's own),
    written from memory.
    """
    engine.load("spells", WHOLE, melanoma())
    [row] = engine.run(f"incidence_gray_test('spells', 'plan', '{cause}', most_groups=5)")
    assert round(row["statistic"], 6) == statistic and row["degrees_of_freedom"] == 1


def test_too_many_groups_is_said(engine):
    rows = [
        {"plan": str(i % 3), "entry": 0, "duration": i, "event": 1, "cause": "moved", "weight": 1}
        for i in range(9)
    ]
    engine.load("spells", WHOLE, rows)
    [row] = engine.run("incidence_gray_test('spells', 'plan', 'moved', most_groups=2)")
    assert row["status"] == "too_many_groups" and row["statistic"] is None


@pytest.mark.parametrize(
    ("call", "sentence"),
    [
        ("incidence_gray_test('spells', 'plan')", "argument 'causes' is missing"),
        (
            "incidence_gray_test('spells', 'plan', {'a': 'b'})",
            "causes is a mapping; it must be a cause or a list of causes",
        ),
        (
            "incidence_gray_test('spells', 'plan', 'a', most_groups=1)",
            "most_groups is 1; it must be a whole number of at least 2",
        ),
        (
            "incidence_log_rank_test('spells', 'plan', [])",
            "causes is []; it must be a value or a list of values",
        ),
        (
            "incidence_log_rank_test('spells', 'plan', 'a', by='plan')",
            "by names the column 'plan', which between names already",
        ),
    ],
)
def test_bad_arguments_stop_compilation_with_one_sentence(engine, call, sentence):
    with pytest.raises(CompilationError) as caught:
        engine.render(call)
    assert sentence in str(caught.value)
