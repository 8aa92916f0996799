"""state_shares against exact rational arithmetic, against cumulative_incidence, and every row accounted
for.
"""

from __future__ import annotations

from collections import Counter
from datetime import date, timedelta
from random import Random

import pytest
from harness import CompilationError
from hypothesis import example, given, settings
from hypothesis import strategies as st
from spellcurve.exact_incidence import History, state_shares
from test_incidence import WHOLE, close

COLUMNS = {
    "member": "text",
    "since": "text",
    "state": "text",
    "nr": "bigint",
    "joined": "text",
    "plan": "text",
}
STATES = ["trial", "active", "it's paused", "lapsed"]
START = date(2024, 1, 1)
AS_OF = date(2024, 1, 15)
CALL = (
    "state_shares('history', 'member', 'since', 'state', {states!r}, sequence='nr', by=['plan'],"
    " as_of='2024-01-15'{more})"
)


def call(more: str = "") -> str:
    return CALL.format(states=STATES, more=more)


@st.composite
def changes(draw):
    rows = []
    for number in range(draw(st.integers(0, 12))):
        plan = draw(st.sampled_from(["a", None]))
        joined = START + timedelta(days=draw(st.integers(0, 13)))
        first = draw(st.integers(0, 2))
        for nr in range(draw(st.integers(1, 5))):
            day = joined + timedelta(days=draw(st.integers(0, 12)) if nr else first)
            rows.append(
                {
                    "member": f"m{number}",
                    "since": day.isoformat(),
                    "state": draw(st.sampled_from([*STATES, *STATES, *STATES, "?"])),
                    "nr": nr,
                    "joined": joined.isoformat(),
                    "plan": plan,
                }
            )
    for _ in range(draw(st.integers(0, 2))):
        rows.append(
            {
                "member": draw(st.sampled_from([None, "m0"])),
                "since": draw(st.sampled_from([None, "soon"])),
                "state": "trial",
                "nr": 0,
                "joined": START.isoformat(),
                "plan": "a",
            }
        )
    return rows


def fault_of(row: dict) -> str | None:
    if row["member"] is None:
        return "no_subject"
    if row["since"] is None or row["since"] == "soon":
        return "no_time" if row["since"] is None else "unreadable_time"
    if date.fromisoformat(row["since"]) > AS_OF:
        return "after_as_of"
    return None if row["state"] in STATES else "unknown_status"


def histories(rows: list[dict], with_origin: bool, observe_from: date | None) -> dict:
    """Group values to histories, from the sound rows."""
    of_member: dict[str, list[dict]] = {}
    for row in rows:
        if fault_of(row) is None:
            of_member.setdefault(row["member"], []).append(row)
    groups: dict = {}
    for own in of_member.values():
        own.sort(key=lambda row: (row["since"], row["nr"]))
        origin = date.fromisoformat(own[0]["joined"] if with_origin else own[0]["since"])
        turns = {(date.fromisoformat(row["since"]) - origin).days: row["state"] for row in own}
        entry = max(0, (observe_from - origin).days) if observe_from else 0
        groups.setdefault(own[0]["plan"], []).append(
            History(tuple(sorted(turns.items())), (AS_OF - origin).days, entry)
        )
    return groups


@given(rows=changes(), option=st.sampled_from(["", "origin", "late", "both"]))
@example(rows=[], option="")
@settings(max_examples=250)
def test_shares_against_fractions(engine, rows, option):
    engine.load("history", COLUMNS, rows)
    with_origin, late = option in ("origin", "both"), option in ("late", "both")
    more = (", origin='joined'" if with_origin else "") + (", observe_from='2024-01-06'" if late else "")
    found = engine.run(call(more + ", most_durations=16"))
    expected = {
        (plan, row.state, row.duration): row
        for plan, own in histories(rows, with_origin, date(2024, 1, 6) if late else None).items()
        for row in state_shares(own, STATES)
    }
    actual = {(row["plan"], row["state"], row["duration"]): row for row in found}
    assert len(actual) == len(found) and actual.keys() == expected.keys()
    for key, row in actual.items():
        right = expected[key]
        assert (row["at_risk"], row["arrivals"], row["departures"]) == (
            right.at_risk,
            right.arrivals,
            right.departures,
        )
        assert close(row["share"], right.share), (key, row, right)


@given(rows=changes())
@settings(max_examples=50)
def test_every_row_is_accounted_for(engine, rows):
    engine.load("history", COLUMNS, rows)
    refused = engine.run(call(", rows='faulty'"))
    faults = Counter(fault for fault in map(fault_of, rows) if fault)
    assert Counter(row["fault"] for row in refused) == faults
    assert all(row["detail"] for row in refused)


def test_conflicts_and_origins_are_faults(engine):
    row = {"member": "m", "since": "2024-01-03", "nr": 1, "joined": "2024-01-02", "plan": "a"}
    engine.load(
        "history",
        COLUMNS,
        [
            row | {"state": "trial"},
            row | {"state": "active"},
            row | {"since": "2024-01-01", "state": "trial"},
            row | {"since": "2024-01-05", "joined": None, "state": "trial"},
            row | {"since": "2024-01-05", "joined": "x", "state": "trial"},
            row | {"since": "2024-01-05", "state": None},
            row | {"since": "2024-01-06", "state": "active"},
        ],
    )
    refused = engine.run(call(", rows='faulty', origin='joined'"))
    assert Counter(row["fault"] for row in refused) == Counter(
        ["conflicting_status"] * 2 + ["before_origin", "no_origin", "unreadable_origin", "no_status"]
    )


def test_every_unit_horizon_and_small_groups(engine):
    row = {"nr": 1, "joined": None, "plan": "a", "state": "trial"}
    engine.load(
        "history",
        COLUMNS,
        [row | {"member": f"m{i}", "since": f"2024-01-{day:02}"} for i, day in enumerate([1, 1, 5, 9])]
        + [row | {"member": "m0", "since": "2024-01-04", "state": "active"}],
    )
    found = engine.run(call(", grid='every', horizon=8, minimum_at_risk=4"))
    trial = {r["duration"]: (r["at_risk"], r["share"]) for r in found if r["state"] == "trial"}
    assert sorted(trial) == list(range(9))
    assert trial[0] == (4, 1.0) and trial[2] == (4, 1.0)
    assert trial[3] == (4, 0.75) and trial[6] == (3, 0.75)
    assert trial[7] == (2, None)


def test_two_competing_ends_are_cumulative_incidences(engine):
    """From one state to two that end: the same figures as cumulative_incidence, over more durations than
    one doubling reaches.
    """
    dice = Random(1978)
    history, spells = [], []
    for number in range(600):
        joined = START - timedelta(days=dice.randint(0, 900))
        stay, end = dice.randint(1, 900), (AS_OF - joined).days
        row = {"member": f"m{number}", "nr": 1, "plan": None}
        history.append(row | {"since": joined.isoformat(), "state": "trial"})
        kind = dice.choice(["active", "lapsed"])
        if stay <= end:
            history.append(row | {"since": (joined + timedelta(days=stay)).isoformat(), "state": kind})
        spells.append(
            {
                "plan": None,
                "entry": 0,
                "duration": min(stay, end),
                "event": int(stay <= end),
                "cause": kind,
                "weight": 1,
            }
        )
    engine.load("history", COLUMNS, history)
    engine.load("spells", WHOLE, spells)
    shares = {(row["state"], row["duration"]): row["share"] for row in engine.run(call(", grid='every'"))}
    compared = 0
    for row in engine.run("cumulative_incidence('spells', by=['plan'])"):
        assert close(shares[row["cause"], row["duration"]], row["incidence"], 1e-11, 1e-14)
        compared += 1
    assert compared > 600


def test_too_many_durations_are_not_made_up(engine):
    row = {"nr": 1, "joined": None, "plan": "a"}
    engine.load(
        "history",
        COLUMNS,
        [row | {"member": f"m{i}", "since": f"2024-01-{i:02}", "state": "trial"} for i in range(1, 15)],
    )
    found = engine.run(call(", most_durations=4"))
    assert {r["duration"] for r in found if r["share"] is None} == set(range(4, 15))


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("'h', 'm', 's', 't'", "argument 'states' is missing"),
        ("'h', 'm', 's', 't', ['a']", "states has 1 states; it must have between 2 and 20"),
        ("'h', 'm', 's', 't', ['a', 'a']", "states names 'a' twice; name it once"),
        (
            "'h', 'm', 's', 't', ['a', 'b'], by='share'",
            "by names the column 'share', which the result uses itself",
        ),
        ("'h', 'm', 's', 't', ['a', 'b'], unit='year'", "unit is 'year'; it must be one of 'day', 'week'"),
    ],
)
def test_bad_arguments_stop_compilation_with_one_sentence(engine, arguments, sentence):
    with pytest.raises(CompilationError) as caught:
        engine.render(f"state_shares({arguments})")
    assert "spellcurve.state_shares: " + sentence in str(caught.value)
