"""The six spell builders against their slow and obvious Python counterparts, row for row, on the engine."""

from __future__ import annotations

from collections import Counter
from datetime import date, datetime
from itertools import product
from random import Random

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
STATUSES = ("active", "trial", "paused", "lapsed", None)


def combinations(most: int = 40, **choices: list) -> list[dict]:
    """Some combinations of options, always the same ones; few, since each is compiled (in one dbt run)."""
    every = [dict(zip(choices, chosen, strict=True)) for chosen in product(*choices.values())]
    some = Random(1963).sample(every, min(most, len(every)))
    return [{name: value for name, value in options.items() if value is not None} for options in some]


INTERVALS = combinations(
    unit=UNITS,
    observe_from=OBSERVED_FROM,
    recorded_at=[None, "written_on"],
    cause=[None, "kind"],
    grace=[0, 2, 40],
) + combinations(
    unit=UNITS, observe_from=OBSERVED_FROM, cause=[None, "kind"], overlaps=["keep", "refuse"], most=20
)
EVENT_LOG = combinations(
    opens=[["join", "rejoin"]],
    closes=["leave", ["leave", "lapse"], {"leave": "left", "lapse": "lapsed"}],
    sequence=[None, "nr"],
    grace=[0, 30],
    unit=UNITS,
    observe_from=OBSERVED_FROM,
    carry=[["subject_key"]],
)
CHANGES = combinations(
    active=[["active", "trial"]],
    ended=[None, "ended"],
    cause=[None, "kind"],
    sequence=[None, "nr"],
    grace=[0, 30],
    unit=UNITS,
    observe_from=OBSERVED_FROM,
)
SNAPSHOTS = combinations(
    active=[["active", "trial"]],
    shape=["snapshots"],
    cause=[None, "kind"],
    grace=[0, 1, 30],
    unit=UNITS[:3],
    observe_from=OBSERVED_FROM,
)
ACTIVITY = combinations(
    lapse_after=[1, 29, 30, 31],
    ends_at=["silence", "last_activity"],
    recorded_at=[None, "written_on"],
    unit=UNITS,
    observe_from=OBSERVED_FROM,
)
FIRST_EVENT = combinations(
    unit=UNITS, observe_from=OBSERVED_FROM, recorded_at=[None, "written_on"], cause=[None, "kind"]
)
DURATIONS = combinations(
    subject=[None, "subject_key"], entry=[None, "waited"], cause=[None, "why"], weight=[None, "spells"]
)
TYPED_INTERVALS = combinations(unit=UNITS, grace=[0, 3])


def without_detail(rows: list[dict]) -> Counter:
    return Counter(tuple((name, value) for name, value in row.items() if name != "detail") for row in rows)


def calls(builder: str, names: tuple[str, ...], options: dict) -> list[str]:
    arguments = ", ".join(
        [repr(name) for name in names] + [f"{name}={value!r}" for name, value in options.items()]
    )
    return [f"{builder}({arguments}, rows={rows!r})" for rows in ("sound", "faulty")]


def check(
    engine, builder: str, tables: dict, columns: tuple, options: dict, among: list[dict], types=None, **fixed
) -> None:
    """Both kinds of rows equal those of the Python builder; every source row is in exactly one of them."""
    fixed = {"carry": ["plan"], "source_rows": True} | fixed
    names = (*tables, *columns)
    engine.render_all([call for each in among for call in calls(builder, names, fixed | each)])
    for name, rows in tables.items():
        engine.load(name, types or RAW, rows)
    sound, faulty = (engine.run(call) for call in calls(builder, names, fixed | options))
    expected_sound, expected_faulty = getattr(rebuild, builder)(
        *tables.values(), *columns, **(fixed | options)
    )
    assert without_detail(sound) == without_detail(expected_sound)
    assert without_detail(faulty) == without_detail(expected_faulty)
    assert all(row["detail"] for row in faulty)
    given_rows = sum(len(rows) for rows in tables.values())
    assert sum(row["source_rows"] for row in sound) + len(faulty) == given_rows


@given(rows=raw_rows((None, "moved", "cost")), options=st.sampled_from(INTERVALS))
@settings(max_examples=250)
def test_intervals(engine, rows, options):
    columns = ("subject_key", "began", "ended")
    check(engine, "spells_from_intervals", {"raw": rows}, columns, options, INTERVALS, as_of=AS_OF)


@given(rows=raw_rows(KINDS), options=st.sampled_from(EVENT_LOG))
@settings(max_examples=250)
def test_event_log(engine, rows, options):
    columns = ("subject_key", "began", "kind")
    check(engine, "spells_from_event_log", {"raw": rows}, columns, options, EVENT_LOG, as_of=AS_OF)


@given(rows=raw_rows(STATUSES), options=st.sampled_from(CHANGES))
@settings(max_examples=250)
def test_status_changes(engine, rows, options):
    columns = ("subject_key", "began", "kind")
    check(engine, "spells_from_status_history", {"raw": rows}, columns, options, CHANGES, as_of=AS_OF)


@given(rows=raw_rows(STATUSES), options=st.sampled_from(SNAPSHOTS))
@settings(max_examples=250)
def test_status_snapshots(engine, rows, options):
    columns = ("subject_key", "began", "kind")
    check(engine, "spells_from_status_history", {"raw": rows}, columns, options, SNAPSHOTS, as_of=AS_OF)


@given(rows=raw_rows((None,)), options=st.sampled_from(ACTIVITY))
@settings(max_examples=250)
def test_activity(engine, rows, options):
    check(
        engine,
        "spells_from_activity",
        {"raw": rows},
        ("subject_key", "began"),
        options,
        ACTIVITY,
        as_of=AS_OF,
    )


@given(
    origins=raw_rows((None,), most=6),
    events=raw_rows((None, "loan", "visit", "zither")),
    options=st.sampled_from(FIRST_EVENT),
)
@settings(max_examples=250)
def test_first_event(engine, origins, events, options):
    tables = {"raw_origins": origins, "raw_events": events}
    columns = ("subject_key", "began", "began")
    check(engine, "spells_to_first_event", tables, columns, options, FIRST_EVENT, as_of=AS_OF)


NUMBERS = ["0", "1", "3", "7", "7.0", "2.5", "-1", "", "many", "1e1", "nan", None]
LENGTHS = dict.fromkeys(["subject_key", "months", "waited", "left", "why", "spells", "plan"], "text")


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
    options=st.sampled_from(DURATIONS),
)
@settings(max_examples=250)
def test_durations(engine, rows, options):
    check(engine, "spells_from_durations", {"raw": rows}, ("months", "left"), options, DURATIONS, LENGTHS)


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
    options=st.sampled_from(TYPED_INTERVALS),
)
@settings(max_examples=150)
def test_dates_and_timestamps_together(engine, rows, options):
    columns = ("subject_key", "began", "ended")
    check(
        engine, "spells_from_intervals", {"raw": rows}, columns, options, TYPED_INTERVALS, TYPED, as_of=AS_OF
    )
