"""Compares the answers of two engines: the same rows, and figures alike to within 1e-9."""

from __future__ import annotations

import math
from collections.abc import Iterable
from datetime import datetime, timedelta
from decimal import Decimal
from typing import Any

from corpus import Case
from harness import Engine

RELATIVE, ABSOLUTE = 1e-9, 1e-12


def plain(value: Any) -> Any:
    if isinstance(value, Decimal):
        return int(value) if value == int(value) else float(value)
    return value


def in_milliseconds(row: dict[str, Any]) -> dict[str, Any]:
    def rounded(moment: datetime) -> datetime:
        later = moment + timedelta(microseconds=500)
        return later.replace(microsecond=later.microsecond // 1000 * 1000)

    return {name: rounded(value) if isinstance(value, datetime) else value for name, value in row.items()}


def in_order(rows: Iterable[dict[str, Any]]) -> list[dict[str, Any]]:
    """Rows by everything but their floats, which may differ in the last digits."""

    def place(row: dict[str, Any]) -> list[tuple[bool, str, str]]:
        return [
            (value is None, type(value).__name__, str(value))
            for value in row.values()
            if not isinstance(value, float)
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


def unlike(engine: Engine, duckdb: Engine, case: Case) -> list[str]:
    """What differs between an engine's answers to a case and DuckDB's, in words."""
    right, given = answers(duckdb, case), answers(engine, case)
    if engine.keeps_milliseconds:
        right, given = ([[in_milliseconds(row) for row in rows] for rows in some] for some in (right, given))
    found = [
        line
        for call, one, other in zip(case.calls, right, given, strict=True)
        for line in differences(call, one, other)
    ]
    if not (case.may_be_empty or all(right)):
        found.append(f"{case.name}: a call gives no rows, so nothing was compared")
    return found
