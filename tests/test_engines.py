"""The same input gives the same rows and figures on every engine."""

from __future__ import annotations

import math
from collections.abc import Iterable
from decimal import Decimal
from typing import Any

import pytest
from corpus import Case, all_cases
from harness import Engine

RELATIVE, ABSOLUTE = 1e-9, 1e-12


def plain(value: Any) -> Any:
    if isinstance(value, Decimal):
        return int(value) if value == int(value) else float(value)
    return value


def in_order(rows: Iterable[dict[str, Any]]) -> list[dict[str, Any]]:
    """Rows by everything but their floats, which may differ in the last digits."""

    def place(row: dict[str, Any]) -> list[tuple[bool, str, str]]:
        return [
            (value is None, type(value).__name__, str(value)) for value in row.values() if not isinstance(value, float)
        ]

    return sorted(({name: plain(value) for name, value in row.items()} for row in rows), key=place)


def differences(call: str, right: list[dict], given: list[dict]) -> list[str]:
    if len(right) != len(given):
        return [f"{call}: {len(given)} rows, but {len(right)} on DuckDB"]
    found = []
    for one, other in zip(in_order(right), in_order(given), strict=True):
        if list(one) != list(other):
            return [f"{call}: columns {list(other)}, but {list(one)} on DuckDB"]
        for name in one:
            a, b = one[name], other[name]
            if isinstance(a, float) and isinstance(b, float):
                if not math.isclose(a, b, rel_tol=RELATIVE, abs_tol=ABSOLUTE):
                    found.append(f"{call}: {name} is {b!r}, but {a!r} on DuckDB, in {other}")
            elif a != b or type(a) is not type(b):
                found.append(f"{call}: {name} is {b!r}, but {a!r} on DuckDB, in {other}")
    return found


def answers(engine: Engine, case: Case) -> list[list[dict]]:
    engine.render_all([*case.made.values(), *case.calls])
    for name, table in case.tables.items():
        engine.load(name, table.columns, table.rows)
    for name, call in case.made.items():
        engine.make(name, call)
    return [engine.run(call) for call in case.calls]


@pytest.mark.parametrize("case", all_cases(), ids=lambda case: case.name)
def test_rows_and_figures_are_those_of_duckdb(each_engine, engine, case):
    right, given = answers(engine, case), answers(each_engine, case)
    found = [
        line for call, one, other in zip(case.calls, right, given, strict=True) for line in differences(call, one, other)
    ]
    assert not found, "\n".join(found[:20])
    if case.name != "no spells":
        assert all(right), "a call that gives no rows compares nothing"
