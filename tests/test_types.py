"""Types of the results on every engine: 64-bit floats, 64-bit counts, dates as dates."""

from __future__ import annotations

import pytest

SPELL = "started_at, last_seen_at, entry, duration, event, weight"
CURVE = "duration, at_risk, events, censored, hazard, survival, std_error, survival_lower, cumulative_hazard"
DATES, COUNTS, FLOATS = {"date"}, {"bigint", "long"}, {"double", "double precision"}
EXPECTED = {
    "started_at": DATES,
    "last_seen_at": DATES,
    **dict.fromkeys(["entry", "duration", "event", "weight", "at_risk", "events", "censored"], COUNTS),
    **dict.fromkeys(["hazard", "survival", "std_error", "survival_lower", "cumulative_hazard"], FLOATS),
}
TYPE_OF = {"duckdb": "typeof({})", "postgres": "cast(pg_typeof({}) as text)", "spark": "typeof({})"}


@pytest.mark.parametrize("kind", ["spells", "curve"])
def test_the_columns_have_the_types_of_the_contract(each_engine, kind):
    each_engine.load(
        "stays",
        {"who": "text", "began": "text", "ended": "text"},
        [{"who": "ann", "began": "2024-01-01", "ended": "2024-02-01"}, {"who": "bob", "began": "2024-01-05"}],
    )
    each_engine.make(
        "some_spells", "spells_from_intervals('stays', 'who', 'began', 'ended', as_of='2024-06-01')"
    )
    each_engine.make("some_curve", "survival_curve('some_spells')")
    names = (SPELL if kind == "spells" else CURVE).split(", ")
    asked = ", ".join(f"{TYPE_OF[each_engine.name].format(name)} as {name}" for name in names)
    found = each_engine.query(f"select {asked} from {'some_' + kind}")[0]
    assert {name: type_.lower() for name, type_ in found.items() if type_.lower() not in EXPECTED[name]} == {}


def test_fractional_weights_give_floating_counts(each_engine):
    columns = {"entry": "bigint", "duration": "bigint", "event": "bigint", "weight": "double"}
    each_engine.load("parts", columns, [{"entry": 0, "duration": 2, "event": 1, "weight": 0.5}])
    each_engine.make("curve_of_parts", "survival_curve('parts', weights='fractional')")
    asked = TYPE_OF[each_engine.name].format("at_risk")
    assert each_engine.query(f"select {asked} as kind from curve_of_parts")[0]["kind"].lower() in FLOATS
