"""The six spell builders against their slow and obvious Python counterparts, row for row, on the engine itself."""

from __future__ import annotations

from collections import Counter
from datetime import date, datetime

from hypothesis import given, settings
from hypothesis import strategies as st
from spellcurve import rebuild
from strategies import AS_OF, raw_rows

RAW = {
    "subject_key": "text",
    "began": "text",
    "ended": "text",
    "kind": "text",
    "written_on": "text",
    "nr": "bigint",
    "plan": "text",
}
TYPED = RAW | {"began": "moment", "ended": "date", "written_on": "date"}

UNITS = ["day", "week", "month", "hour", "minute"]
OBSERVED_FROM = [None, None, "2024-01-31", "2024-02-29 09:30:00"]
KINDS = ("join", "rejoin", "leave", "lapse", "chat", None)


def as_arguments(options: dict) -> str:
    return "".join(f", {name}={value!r}" for name, value in options.items() if value is not None)


def without_detail(rows: list[dict]) -> Counter:
    return Counter(tuple((name, value) for name, value in row.items() if name != "detail") for row in rows)


def check(engine, builder: str, tables: dict, columns: tuple, options: dict, types: dict | None = None) -> None:
    """Both kinds of rows equal those of the Python builder, and every source row is in exactly one of them."""
    for name, rows in tables.items():
        engine.load(name, types or RAW, rows)
    options = {"as_of": AS_OF, "carry": ["plan"], "source_rows": True} | options
    named = ", ".join(repr(name) for name in (*tables, *columns))
    calls = [f"{builder}({named}{as_arguments(options)}, rows={rows!r})" for rows in ("sound", "faulty")]
    sound, faulty = (engine.query(sql) for sql in engine.render_all(calls))
    expected_sound, expected_faulty = getattr(rebuild, builder)(*tables.values(), *columns, **options)
    assert without_detail(sound) == without_detail(expected_sound)
    assert without_detail(faulty) == without_detail(expected_faulty)
    assert all(row["detail"] for row in faulty)
    given_rows = sum(len(rows) for rows in tables.values())
    assert sum(row["source_rows"] for row in sound) + len(faulty) == given_rows


@given(
    rows=raw_rows((None, "moved", "cost")),
    unit=st.sampled_from(UNITS),
    observe_from=st.sampled_from(OBSERVED_FROM),
    recorded_at=st.sampled_from([None, "written_on"]),
    cause=st.sampled_from([None, "kind"]),
    how=st.sampled_from([("merge", 0), ("merge", 2), ("merge", 40), ("keep", 0), ("refuse", 0)]),
)
@settings(max_examples=250)
def test_intervals(engine, rows, unit, observe_from, recorded_at, cause, how):
    options = {"unit": unit, "observe_from": observe_from, "recorded_at": recorded_at, "cause": cause}
    options |= {"overlaps": how[0], "grace": how[1]}
    check(engine, "spells_from_intervals", {"raw": rows}, ("subject_key", "began", "ended"), options)


@given(
    rows=raw_rows(KINDS),
    unit=st.sampled_from(UNITS),
    observe_from=st.sampled_from(OBSERVED_FROM),
    sequence=st.sampled_from([None, "nr"]),
    closes=st.sampled_from(["leave", ["leave", "lapse"], {"leave": "left", "lapse": "lapsed"}]),
    grace=st.sampled_from([0, 30]),
)
@settings(max_examples=250)
def test_event_log(engine, rows, unit, observe_from, sequence, closes, grace):
    options = {"opens": ["join", "rejoin"], "closes": closes, "sequence": sequence, "grace": grace}
    options |= {"unit": unit, "observe_from": observe_from, "carry": ["subject_key"] if sequence else ["plan"]}
    check(engine, "spells_from_event_log", {"raw": rows}, ("subject_key", "began", "kind"), options)


@given(
    rows=raw_rows(("active", "trial", "paused", "lapsed", None)),
    unit=st.sampled_from(UNITS),
    observe_from=st.sampled_from(OBSERVED_FROM),
    ended=st.sampled_from([None, "ended"]),
    cause=st.sampled_from([None, "kind"]),
    sequence=st.sampled_from([None, "nr"]),
    grace=st.sampled_from([0, 30]),
)
@settings(max_examples=250)
def test_status_changes(engine, rows, unit, observe_from, ended, cause, sequence, grace):
    options = {"active": ["active", "trial"], "ended": ended, "cause": cause, "sequence": sequence}
    options |= {"grace": grace, "unit": unit, "observe_from": observe_from}
    check(engine, "spells_from_status_history", {"raw": rows}, ("subject_key", "began", "kind"), options)


@given(
    rows=raw_rows(("active", "trial", "paused", "lapsed", None)),
    unit=st.sampled_from(UNITS[:3]),
    observe_from=st.sampled_from(OBSERVED_FROM),
    cause=st.sampled_from([None, "kind"]),
    grace=st.sampled_from([0, 1, 30]),
)
@settings(max_examples=200)
def test_status_snapshots(engine, rows, unit, observe_from, cause, grace):
    options = {"active": ["active", "trial"], "shape": "snapshots", "cause": cause, "grace": grace}
    options |= {"unit": unit, "observe_from": observe_from}
    check(engine, "spells_from_status_history", {"raw": rows}, ("subject_key", "began", "kind"), options)


@given(
    rows=raw_rows((None,)),
    unit=st.sampled_from(UNITS),
    observe_from=st.sampled_from(OBSERVED_FROM),
    recorded_at=st.sampled_from([None, "written_on"]),
    lapse_after=st.sampled_from([1, 29, 30, 31]),
    ends_at=st.sampled_from(["silence", "last_activity"]),
)
@settings(max_examples=200)
def test_activity(engine, rows, unit, observe_from, recorded_at, lapse_after, ends_at):
    options = {"lapse_after": lapse_after, "ends_at": ends_at, "recorded_at": recorded_at}
    options |= {"unit": unit, "observe_from": observe_from}
    check(engine, "spells_from_activity", {"raw": rows}, ("subject_key", "began"), options)


@given(
    origins=raw_rows((None,), most=6),
    events=raw_rows((None, "loan", "visit", "zither")),
    unit=st.sampled_from(UNITS),
    observe_from=st.sampled_from(OBSERVED_FROM),
    recorded_at=st.sampled_from([None, "written_on"]),
    cause=st.sampled_from([None, "kind"]),
)
@settings(max_examples=250)
def test_first_event(engine, origins, events, unit, observe_from, recorded_at, cause):
    options = {"unit": unit, "observe_from": observe_from, "recorded_at": recorded_at, "cause": cause}
    tables = {"raw_origins": origins, "raw_events": events}
    check(engine, "spells_to_first_event", tables, ("subject_key", "began", "began"), options)


NUMBERS = ["0", "1", "3", "7", "7.0", "2.5", "-1", "", "many", "1e1", "nan", None]
LENGTHS = {"subject_key": "text", "months": "text", "waited": "text", "left": "text", "why": "text", "spells": "text", "plan": "text"}


@given(
    rows=st.lists(
        st.fixed_dictionaries(
            {
                "subject_key": st.sampled_from(["ann", "bob", None]),
                "months": st.sampled_from(NUMBERS),
                "waited": st.sampled_from(NUMBERS),
                "left": st.sampled_from(["0", "1", "true", "FALSE", "t", "2", "yes", None]),
                "why": st.sampled_from(["moved", None]),
                "spells": st.sampled_from([*NUMBERS, "12", "0.5"]),
                "plan": st.just("x"),
            }
        ),
        max_size=12,
    ),
    subject=st.sampled_from([None, "subject_key"]),
    entry=st.sampled_from([None, "waited"]),
    cause=st.sampled_from([None, "why"]),
    weight=st.sampled_from([None, "spells"]),
)
@settings(max_examples=250)
def test_durations(engine, rows, subject, entry, cause, weight):
    options = {"as_of": None, "subject": subject, "entry": entry, "cause": cause, "weight": weight}
    engine.load("raw", LENGTHS, rows)
    options = {name: value for name, value in options.items() if value is not None}
    options |= {"carry": ["plan"], "source_rows": True}
    call = f"spells_from_durations('raw', 'months', 'left'{as_arguments(options)}"
    sound, faulty = (engine.query(sql) for sql in engine.render_all([f"{call}, rows='{kind}')" for kind in ("sound", "faulty")]))
    expected_sound, expected_faulty = rebuild.spells_from_durations(rows, "months", "left", **options)
    assert without_detail(sound) == without_detail(expected_sound)
    assert without_detail(faulty) == without_detail(expected_faulty)


@given(
    rows=st.lists(
        st.fixed_dictionaries(
            {
                "subject_key": st.sampled_from(["ann", "bob"]),
                "began": st.none() | st.datetimes(datetime(2024, 1, 1), datetime(2024, 4, 20)),
                "ended": st.none() | st.dates(date(2024, 1, 1), date(2024, 4, 20)),
                "plan": st.just("x"),
            }
        ),
        max_size=10,
    ),
    unit=st.sampled_from(UNITS),
    grace=st.sampled_from([0, 3]),
)
@settings(max_examples=150)
def test_dates_and_timestamps_together(engine, rows, unit, grace):
    columns = ("subject_key", "began", "ended")
    check(engine, "spells_from_intervals", {"raw": rows}, columns, {"unit": unit, "grace": grace}, types=TYPED)
