"""survival_curve against exact rational arithmetic, on the engine itself."""

from __future__ import annotations

from fractions import Fraction

import pytest
from harness import CompilationError, Engine
from hypothesis import example, given, settings
from hypothesis import strategies as st
from spellcurve import compare_curves, exact, group_spells
from strategies import spell_rows

TOLERANCE = 1e-10
WHOLE = {"plan": "text", "entry": "bigint", "duration": "bigint", "event": "bigint", "weight": "bigint"}
FRACTIONAL = WHOLE | {"weight": "double"}
OPTIONS = [
    {},
    {"interval_scale": "linear", "confidence": 0.9},
    {"interval_scale": "log", "confidence": 0.99},
    {"interval_scale": "logit"},
    {"interval_scale": "arcsine", "confidence": 0.5},
    {"grid": "every"},
    {"grid": "every", "horizon": 4, "interval_scale": "logit", "confidence": 0.999999},
    {"horizon": 0},
    {"horizon": 5},
    {"horizon": 11, "minimum_at_risk": 3},
    {"minimum_at_risk": 5, "small_counts": "hide", "grid": "every"},
]


def call(by: list[str], **options) -> str:
    arguments = "".join(f", {name}={value!r}" for name, value in options.items())
    return f"survival_curve('spells', by={by!r}{arguments})"


def exactly(rows: list[dict], by: list[str], **options) -> dict:
    spells = [
        exact.Spell(
            row["entry"],
            row["duration"],
            row["event"],
            Fraction(row["weight"]),
            group=tuple(row[name] for name in by),
        )
        for row in rows
    ]
    return exact.survival_curves(group_spells(spells), **options)


def check(engine: Engine, columns: dict, rows: list[dict], by: list[str], **options) -> None:
    engine.load("spells", columns, rows)
    actual = engine.run(call(by, **options))
    found = compare_curves(actual, exactly(rows, by, **options), by=by, tolerance=TOLERANCE)
    assert found.agrees, found.report()


@given(rows=spell_rows(), options=st.sampled_from(OPTIONS), by=st.sampled_from([[], ["plan"]]))
@example(rows=[], options={}, by=[])
@example(rows=[], options={"grid": "every"}, by=["plan"])
@example(rows=[{"plan": None, "entry": 0, "duration": 0, "event": 1, "weight": 1}], options={}, by=["plan"])
@example(rows=[{"plan": "a", "entry": 4, "duration": 4, "event": 1, "weight": 1}], options={}, by=["plan"])
@settings(max_examples=400)
def test_whole_weights(engine, rows, options, by):
    check(engine, WHOLE, rows, by, **options)


@given(rows=spell_rows(fractional=True), options=st.sampled_from(OPTIONS))
@settings(max_examples=150)
def test_fractional_weights(engine, rows, options):
    check(engine, FRACTIONAL, rows, ["plan"], weights="fractional", **options)


def test_a_fractional_weight_is_never_rounded_away(engine):
    rows = [{"plan": "a", "entry": 0, "duration": 3, "event": 1, "weight": 0.5}]
    engine.load("spells", FRACTIONAL, rows)
    at_three = engine.run(call([]))[-1]
    assert at_three["at_risk"] is None and at_three["events"] is None
    assert at_three["survival"] == 0


@pytest.mark.parametrize("scale", exact.INTERVAL_SCALES)
def test_three_thousand_durations_of_a_billion_spells(engine, scale):
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
    assert sum(row["weight"] for row in rows) > 10**9
    check(engine, WHOLE, rows, ["plan"], interval_scale=scale)


def test_few_events_among_a_billion_keep_their_digits(engine):
    rows = [
        {"plan": "a", "entry": 0, "duration": duration, "event": 1, "weight": 1}
        for duration in range(1, 40, 3)
    ] + [{"plan": "a", "entry": 0, "duration": 60, "event": 0, "weight": 10**9}]
    for scale in exact.INTERVAL_SCALES:
        check(engine, WHOLE, rows, [], interval_scale=scale)


def test_one_left_at_the_end_of_a_billion(engine):
    rows = [
        {"plan": "a", "entry": 0, "duration": 1, "event": 1, "weight": 10**9 - 1},
        {"plan": "a", "entry": 0, "duration": 2, "event": 0, "weight": 1},
    ]
    check(engine, WHOLE, rows, [])
    assert engine.run(call([]))[-1]["survival"] > 0


@pytest.mark.parametrize("options", ["", ", horizon=5"])
def test_spells_without_an_entry_or_a_duration_only_make_their_group_known(engine, options):
    rows = [
        {"plan": "a", "entry": 0, "duration": None, "event": 1, "weight": 2},
        {"plan": "b", "entry": None, "duration": 3, "event": 1, "weight": 2},
        {"plan": "c", "entry": 1, "duration": None, "event": 0, "weight": 2},
    ]
    engine.load("spells", {"plan": "text", **WHOLE}, rows)
    found = engine.run(f"survival_curve('spells', by='plan'{options})")
    assert sorted((row["plan"], row["duration"], row["at_risk"]) for row in found) == [
        ("a", 0, 0),
        ("b", 0, 0),
        ("c", 0, 0),
    ]


def test_the_groups_are_first_and_keep_their_names(engine):
    engine.load(
        "spells",
        {"group": "text", "member's plan": "text", **WHOLE},
        [
            {
                "group": "x",
                "member's plan": "y",
                "plan": "z",
                "entry": 0,
                "duration": 1,
                "event": 1,
                "weight": 1,
            }
        ],
    )
    row = engine.run("""survival_curve('spells', by=['group', "member's plan", 'plan'])""")[0]
    assert list(row)[:4] == ["group", "member's plan", "plan", "duration"]
    assert list(row)[3:] == ["duration", *exact.FIGURES]


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("'spells', confidense=0.9", "unknown argument 'confidense'; it takes spells, by, confidence"),
        ("", "argument 'spells' is missing; give a relation"),
        ("'spells', confidence=95", "confidence is 95; it must be a number between 0 and 1"),
        (
            "'spells', interval_scale='loglog'",
            "interval_scale is 'loglog'; it must be one of 'linear', 'log', 'log-log'",
        ),
        ("'spells', horizon=-1", "horizon is -1; it must be a whole number of at least 0"),
        ("'spells', horizon='30'", "horizon is '30'; it must be a whole number of at least 0"),
        ("'spells', grid='daily'", "grid is 'daily'; it must be one of 'steps', 'every'"),
        ("'spells', by='events'", "by names the column 'events', which the result uses itself; rename it"),
        ("'spells', by=['plan', 'Plan']", "by names the column 'Plan' twice"),
        ("'spells', by=7", "by is 7; it must be a column name or a list of column names"),
        (
            "'spells', minimum_at_risk=true",
            "minimum_at_risk is True; it must be a whole number of at least 0",
        ),
        ("'spells', small_counts='mask'", "small_counts is 'mask'; it must be one of 'keep', 'hide'"),
        ("'spells', weights=2", "weights is 2; it must be one of 'whole', 'fractional'"),
        ("'spells', [], 0.95, 'log', none, 'steps', 0, 'keep', 'whole', 'none', 9", "too many arguments"),
    ],
)
def test_bad_arguments_stop_compilation_with_one_sentence(engine, arguments, sentence):
    with pytest.raises(CompilationError) as caught:
        engine.render(f"survival_curve({arguments})")
    assert "spellcurve.survival_curve: " + sentence in str(caught.value)


def test_the_relation_may_be_a_cte(engine):
    sql = engine.render("survival_curve('of_members')")
    wrapped = f"""
        with of_members as (select 0 as entry, 2 as duration, 1 as event, 1 as weight)
        select duration, survival from ({sql}) as curve order by duration
    """
    assert [tuple(row.values()) for row in engine.query(wrapped)] == [(0, 1.0), (2, 0.0)]
