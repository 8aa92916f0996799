"""actuarial_table against exact rational arithmetic and published life tables."""

from __future__ import annotations

from typing import Any

import pytest
from harness import CompilationError
from hypothesis import example, given, settings
from hypothesis import strategies as st
from spellcurve import exact_incidence
from strategies import spell_rows
from test_incidence import FRACTIONAL, TOLERANCE, WHOLE, call, close, in_groups

COUNTS = ("entering", "censored", "exposed", "events")
FIGURES = ("hazard_share", "survival", "std_error")
OPTIONS: list[dict[str, Any]] = [{"width": 1}, {"width": 5}, {"width": 3, "horizon": 6}, {"width": 30}]


def with_cause(rows: list[dict]) -> list[dict]:
    return [row | {"cause": "event" if row["event"] else None} for row in rows]


def check(engine, columns, rows, by, **options):
    engine.load("spells", columns, with_cause(rows))
    found = engine.run(call("actuarial_table", by, **options))
    options.pop("weights", None)
    expected = {
        (group, row.from_duration): row
        for group, spells in in_groups(with_cause(rows), by).items()
        for row in exact_incidence.actuarial_table(spells, **options)
    }
    actual = {(tuple(row[name] for name in by), row["from_duration"]): row for row in found}
    assert len(actual) == len(found)
    assert actual.keys() == expected.keys()
    for key, row in actual.items():
        assert row["to_duration"] == expected[key].to_duration
        for name in (*COUNTS, *FIGURES):
            assert close(row[name], getattr(expected[key], name), TOLERANCE), (key, name, row, expected[key])


@given(rows=spell_rows(largest=17), options=st.sampled_from(OPTIONS), by=st.sampled_from([[], ["plan"]]))
@example(rows=[], options=OPTIONS[0], by=["plan"])
@example(
    rows=[{"plan": "a", "entry": 2, "duration": 3, "event": 1, "weight": 1}], options={"width": 5}, by=[]
)
@example(
    rows=[{"plan": "a", "entry": 9, "duration": 9, "event": 1, "weight": 1}], options={"width": 3}, by=[]
)
@settings(max_examples=250)
def test_whole_weights(engine, rows, options, by):
    check(engine, WHOLE, rows, by, **options)


@given(rows=spell_rows(fractional=True, largest=17))
@settings(max_examples=80)
def test_fractional_weights(engine, rows):
    check(engine, FRACTIONAL, rows, ["plan"], width=5, weights="fractional")


def test_a_billion_spells(engine):
    rows = [
        {
            "plan": "a",
            "entry": d // 3 if d % 5 == 0 else 0,
            "duration": d,
            "event": int(d % 3 == 0),
            "weight": 333_333 + 7919 * d % 4001,
        }
        for d in range(3_000)
    ]
    check(engine, WHOLE, rows, [], width=7)


def grouped(bands: list[tuple[int, int, int]]) -> list[dict]:
    """Spells from the rows of a printed table: (start of the band, events, censored)."""
    return [
        {"plan": "a", "entry": 0, "duration": start, "event": event, "cause": None, "weight": count}
        for start, events, censored in bands
        for event, count in ((1, events), (0, censored))
        if count
    ]


def test_cutler_and_ederers_kidney_cancer_patients(engine):
    """126 patients with localized kidney cancer: Cutler, S. J. and Ederer, F. (1958). Maximum
    utilization of the
    life table method in analyzing survival. Journal of Chronic Diseases 8, 699-712. Data and figures
    from memory.
    Lost and withdrawn are added together, as the method does.
    """
    engine.load(
        "spells", WHOLE, grouped([(0, 47, 19), (1, 5, 17), (2, 2, 15), (3, 2, 9), (4, 0, 6), (5, 0, 4)])
    )
    rows = engine.run("actuarial_table('spells', width=1, horizon=5)")
    assert [row["entering"] for row in rows] == [126, 60, 38, 21, 10]
    assert [row["exposed"] for row in rows] == [116.5, 51.5, 30.5, 16.5, 7.0]
    assert [round(row["hazard_share"], 2) for row in rows] == [0.40, 0.10, 0.07, 0.12, 0.0]
    assert [round(row["survival"], 2) for row in rows] == [0.60, 0.54, 0.50, 0.44, 0.44]
    assert round(rows[-1]["std_error"], 3) == 0.060


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("'spells'", "argument 'width' is missing; give a number"),
        ("'spells', width=0", "width is 0; it must be a whole number of at least 1"),
        (
            "'spells', width=7, horizon=30",
            "horizon is 30 and width is 7; horizon must be a whole number of bands",
        ),
        ("'spells', width=7, by='exposed'", "by names the column 'exposed', which the result uses itself"),
    ],
)
def test_bad_arguments_stop_compilation_with_one_sentence(engine, arguments, sentence):
    with pytest.raises(CompilationError) as caught:
        engine.render(f"actuarial_table({arguments})")
    assert "spellcurve.actuarial_table: " + sentence in str(caught.value)
