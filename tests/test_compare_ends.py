"""What the validator recomputes of causes, recurrent events and states: the short way and the long one."""

from __future__ import annotations

from collections import Counter
from datetime import date
from fractions import Fraction
from typing import Any

import pytest
from corpus import Case
from corpus.incidence import CASES
from hypothesis import given, settings
from hypothesis import strategies as st
from spellcurve import compare_ends, exact_incidence
from spellcurve.compare_readouts import compare_readouts
from spellcurve.compare_spells import compare_rows
from spellcurve.exact_incidence import History, Unit
from spellcurve.provenance import Provenance, first_provenance
from test_incidence import in_groups, rows_with_causes

DIGITS = 80
CLOSE = Fraction(1, 10**60)


def same(one: Any, other: Any) -> bool:
    """Whether two figures are one but for the last of the digits kept, or of a float."""
    if not isinstance(one, Fraction | float) or other is None:
        return one == other
    close = CLOSE if isinstance(one, Fraction) else Fraction(1, 10**13)
    return abs(Fraction(one) - Fraction(other)) <= close * max(1, abs(Fraction(one)))


def all_same(short: list[Any], long: list[Any]) -> None:
    assert len(short) == len(long)
    for one, other in zip(short, long, strict=True):
        for name, figure in vars(one).items():
            assert same(figure, getattr(other, name)), (name, one, other)


@given(rows=rows_with_causes(), others=st.sampled_from(["competing", "censored"]))
@settings(max_examples=150)
def test_running_sums_give_the_incidences_of_the_definition(rows, others):
    for spells in in_groups(rows, ["plan"]).values():
        short = exact_incidence.cumulative_incidence(spells, None, others)
        all_same(short, exact_incidence.cumulative_incidence(spells, None, others, digits=DIGITS))


@st.composite
def units(draw):
    found = []
    for _ in range(draw(st.integers(1, 8))):
        spells, events = [], []
        for _ in range(draw(st.integers(1, 3))):
            entry = draw(st.sampled_from([0, 0, 1, 4]))
            spells.append((entry, draw(st.integers(entry, 9))))
        for entry, end in spells:
            inside = [t for t in range(end + 1) if entry < t or entry == 0]
            events += draw(st.lists(st.sampled_from(inside), max_size=3)) if inside else []
        found.append(Unit(tuple(spells), tuple(events), draw(st.sampled_from([1, 3, Fraction(5, 8)]))))
    return found


@given(units=units(), grid=st.sampled_from(["steps", "every"]), horizon=st.sampled_from([None, 3]))
@settings(max_examples=200)
def test_changes_of_units_give_the_variances_of_the_definition(units, grid, horizon):
    short = exact_incidence.mean_cumulative_count(units, horizon, grid)
    all_same(short, exact_incidence.mean_cumulative_count(units, horizon, grid, digits=DIGITS))


@given(rows=rows_with_causes())
@settings(max_examples=100)
def test_rounded_sums_give_gray_s_statistic(rows):
    groups = list(in_groups(rows, ["plan"]).values())
    short = exact_incidence.gray_test(groups, ["moved", ""])
    long = exact_incidence.gray_test(groups, ["moved", ""], digits=DIGITS)
    assert short.observed == long.observed
    for one, other in zip(short.scores, long.scores, strict=True):
        assert same(one, other)
    for ones, others in zip(short.covariance, long.covariance, strict=True):
        assert all(same(one, other) for one, other in zip(ones, others, strict=True))


@st.composite
def histories(draw):
    found = []
    for _ in range(draw(st.integers(1, 8))):
        tenures = sorted(draw(st.sets(st.integers(0, 9), min_size=1, max_size=4)))
        turns = tuple((t, draw(st.sampled_from(["a", "b", "c"]))) for t in tenures)
        found.append(History(turns, draw(st.integers(tenures[-1], 12)), draw(st.sampled_from([0, 0, 3]))))
    return found


@given(histories=histories())
@settings(max_examples=150)
def test_states_are_those_of_a_head_count_by_hand(histories):
    """Risk sets and moves counted stay by stay, and rounded shares against exact ones."""
    short = exact_incidence.state_shares(histories, ["a", "b", "c"])
    all_same(short, exact_incidence.state_shares(histories, ["a", "b", "c"], digits=DIGITS))
    for row in short:
        stays = []
        for one in histories:
            ends = [*(t for t, _ in one.turns[1:]), one.end]
            for (begin, state), end in zip(one.turns, ends, strict=True):
                stays.append((state, max(begin, one.entry), end, begin))
        if row.duration:
            assert row.at_risk == sum(s == row.state and b < row.duration <= e for s, b, e, _ in stays)
        else:
            assert row.at_risk == sum(s == row.state and b == 0 for s, b, _, _ in stays)


def calls(case: Case) -> list[str]:
    return [call for call in case.calls if call.split("(")[0] in compare_ends.KEYS]


@pytest.mark.parametrize("long_way", [False, True], ids=["short", "long"])
@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_every_call_of_the_corpus_is_recomputed(engine, case, long_way, monkeypatch):
    if long_way:
        monkeypatch.setattr(compare_ends, "_SHORT", -1)
    for name, table in case.tables.items():
        engine.load(name, table.columns, table.rows)
    made: dict[str, Provenance] = {}
    for name, call in case.made.items():
        engine.make(name, call)
        made[name] = provenance_of(engine, call)

    def read(relation: str, select: str) -> list[dict[str, Any]]:
        return engine.query(select.replace("{source}", relation))

    known = compare_ends.Recomputed(read, engine.quote, made.get)
    unknown = compare_ends.Recomputed(read, engine.quote)
    assert calls(case)
    for call in calls(case):
        provenance, published = provenance_of(engine, call), engine.run(call)
        assert published
        if provenance.options.get("rows") == "faulty":
            assert places(known.refused(provenance)) == places(published), call
            with pytest.raises(ValueError, match="refused rows"):
                known.rows(provenance)
            continue
        names = compare_ends.names(provenance)
        for recomputed in (known, unknown) if made else (known,):
            table = recomputed.table(provenance)
            found = compare_readouts(published, table, names, differences=compare_ends.DIFFERENCES)
            assert found.agrees and found.figures >= len(published), (call, found.report())


def provenance_of(engine: Any, call: str) -> Provenance:
    found = first_provenance(engine.render(call))
    assert found is not None
    return found


def places(rows: list[dict[str, Any]]) -> Counter:
    names = ("subject_id", "given_time", "given_status", "fault")
    return Counter(tuple(row.get(name) for name in names) for row in rows)


def test_a_time_that_is_no_text_is_not_compared_as_text(each_engine):
    rows = [{"who": None, "since": day, "state": nr} for day in (date(2024, 3, 1), None) for nr in (1, 2)]
    each_engine.load("history", {"who": "text", "since": "date", "state": "bigint"}, rows)
    call = "state_shares('history', 'who', 'since', 'state', ['1', '2'], as_of='2024-09-01', rows='faulty')"
    recomputed = compare_ends.Recomputed(
        lambda relation, select: each_engine.query(select.replace("{source}", relation)), each_engine.quote
    )
    refused = recomputed.refused(provenance_of(each_engine, call))
    assert len(refused) == 4 and all(row.keys() == {"subject_id", "given_status", "fault"} for row in refused)
    assert compare_rows(each_engine.run(call), refused, "refused row").agrees


def test_other_macros_are_refused():
    with pytest.raises(ValueError, match="survival_curve is recomputed elsewhere"):
        compare_ends.Recomputed(lambda relation, select: []).rows(Provenance("survival_curve", "1"))
