"""What is read from a table of incidences, and the generic test that guards it."""

from __future__ import annotations

import math

import pytest
from hypothesis import given, settings
from test_incidence import WHOLE, call, close, in_groups, rows_with_causes

INCIDENCE = call("cumulative_incidence", ["plan"])
CURVE = "survival_curve('spells', by=['plan'])"


def make(engine, rows: list[dict]) -> None:
    engine.load("spells", WHOLE, rows)
    engine.make("incidences", INCIDENCE)


@given(rows=rows_with_causes(largest=9))
@settings(max_examples=80)
def test_incidence_at_reads_the_row_in_force(engine, rows):
    make(engine, rows)
    table = engine.query("select * from incidences")
    found = engine.run("incidence_at('incidences', [0, 4, 20], by=['plan'])")
    keys = {(row["plan"], row["cause"]) for row in table}
    assert {(r["plan"], r["cause"], r["duration"]) for r in found} == {
        (*k, d) for k in keys for d in (0, 4, 20)
    }
    assert len(found) == 3 * len(keys)
    spells = {key[0]: own for key, own in in_groups(rows, ["plan"]).items()}
    for row in found:
        own = [r for r in table if (r["plan"], r["cause"]) == (row["plan"], row["cause"])]
        group = [r for r in table if r["plan"] == row["plan"]]
        last = max(r["duration"] for r in group)
        total = sum(r["incidence"] for r in group if r["duration"] == last)
        if row["duration"] > last and total < 1 - 1e-9:
            assert row["status"] == "beyond_follow_up" and row["incidence"] is None and row["at_risk"] is None
            continue
        in_force = max((r for r in own if r["duration"] <= row["duration"]), key=lambda r: r["duration"])
        assert row["status"] == "observed"
        for name in ("incidence", "incidence_lower", "incidence_upper"):
            assert row[name] == in_force[name]
        t = row["duration"]
        inside = [s for s in spells[row["plan"]] if s.entry < t <= s.duration or (t == 0 and s.entry == 0)]
        if not any(s.entry for s in spells[row["plan"]]):
            assert row["at_risk"] == sum(s.weight for s in inside)


def test_incidence_at_says_why_not(engine):
    engine.load(
        "spells",
        WHOLE,
        [
            {
                "plan": plan,
                "entry": 0,
                "duration": d,
                "event": int(d < 9),
                "cause": "x" if d < 9 else None,
                "weight": 1,
            }
            for plan in ("a", "b")
            for d in (2, 4, 9)
        ],
    )
    engine.make("incidences", call("cumulative_incidence", ["plan"], minimum_at_risk=2))
    found = engine.run("incidence_at('incidences', [3, 5, 10], by=['plan'])")
    statuses = {row["duration"]: row["status"] for row in found if row["plan"] == "a"}
    assert statuses == {3: "observed", 5: "too_few_at_risk", 10: "beyond_follow_up"}
    assert {row["status"] for row in engine.run("incidence_at('incidences', [3], by=[])")} == {
        "several_curves"
    }


@given(rows=rows_with_causes(largest=9))
@settings(max_examples=60)
def test_hazards_are_sums_over_the_rows(engine, rows):
    make(engine, rows)
    sums: dict[tuple, list[float]] = {}
    for row in sorted(
        engine.run("incidence_hazards('incidences', by=['plan'])"), key=lambda r: r["duration"]
    ):
        running = sums.setdefault((row["plan"], row["cause"]), [0.0, 0.0])
        hazard = row["events"] / row["at_risk"] if row["events"] else 0.0
        running[0] += hazard
        running[1] += hazard / row["at_risk"] if hazard else 0.0
        assert close(row["hazard"], hazard) and close(row["cumulative_hazard"], running[0])
        assert close(row["cumulative_hazard_std_error"], math.sqrt(running[1]))


@given(rows=rows_with_causes(largest=9))
@settings(max_examples=60)
def test_the_stack_adds_up_to_one(engine, rows):
    make(engine, rows)
    survival = {(row["plan"], row["duration"]): row["survival"] for row in engine.run(CURVE)}
    stack: dict[tuple, list[dict]] = {}
    for row in engine.run("incidence_stacked('incidences', by=['plan'], rest='members')"):
        stack.setdefault((row["plan"], row["duration"]), []).append(row)
    for key, parts in stack.items():
        assert abs(sum(part["share"] for part in parts) - 1) < 1e-12
        rest = next(part for part in parts if part["part"] == "members")
        assert abs(rest["share"] - survival[key]) < 1e-12 and rest["share_to"] == 1
        edge = 0.0
        for part in sorted((p for p in parts if p["share"] > 1e-9), key=lambda p: p["share_from"]):
            assert abs(part["share_from"] - edge) < 1e-12
            assert abs(part["share_to"] - part["share_from"] - part["share"]) < 1e-12
            edge = part["share_to"]


SOUND = "test_incidence_is_sound('{table}', by=['plan'], curve='curves')"


@given(rows=rows_with_causes())
@settings(max_examples=60)
def test_every_incidence_is_sound(engine, rows):
    make(engine, rows)
    engine.make("curves", CURVE)
    assert engine.run(SOUND.format(table="incidences")) == []


@pytest.mark.parametrize(
    ("damage", "problem"),
    [
        ("update broken set incidence = 1.5 where duration = 5", "a share is outside 0 and 1"),
        (
            "update broken set incidence = incidence / 2, incidence_lower = 0"
            " where duration = 5 and cause = 'moved'",
            "incidence falls",
        ),
        (
            "update broken set incidence = incidence + 1e-6 where duration = 5",
            "survival and the causes do not add up to 1",
        ),
        ("delete from broken where duration = 0", "the cause has no row at duration 0"),
        (
            "insert into broken select * from broken where duration = 5",
            "the duration stands on several rows of its cause",
        ),
        ("update broken set at_risk = 1 where duration = 1", "more ended than were at risk"),
        (
            "update broken set at_risk = 100 where duration = 1 and cause = 'moved'",
            "the causes of one duration have different numbers at risk",
        ),
        ("update broken set incidence_lower = 0.99 where duration = 1", "incidence is outside its bounds"),
        ("update broken set incidence_upper = 1.01 where duration = 1", "a bound is outside 0 and 1"),
        ("update broken set events = -1 where duration = 1", "a count is negative"),
        ("update broken set std_error = -1 where duration = 1", "a figure is negative"),
        ("update broken set cause = null where cause = 'moved'", "cause is null"),
        ("update broken set duration = null where duration = 5", "duration is null or negative"),
        (
            "update broken set incidence = 0.9, incidence_upper = 0.9 where duration = 5",
            "the causes add up to more than 1",
        ),
    ],
)
def test_each_fault_is_found(engine, damage, problem):
    rows = [
        {
            "plan": None,
            "entry": 0,
            "duration": d,
            "event": int(d < 7),
            "cause": c if d < 7 else None,
            "weight": 1,
        }
        for d, c in [(1, "moved"), (1, "price"), (3, "moved"), (5, "moved"), (5, "price"), (8, ""), (9, "")]
    ]
    make(engine, rows)
    engine.make("curves", CURVE)
    engine.connection.execute("create or replace table broken as select * from incidences")
    engine.connection.execute(damage)
    assert problem in {row["problem"] for row in engine.run(SOUND.format(table="broken"))}
