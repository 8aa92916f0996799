"""What every engine must answer alike: tables, and macro calls on them.

Each module here defines CASES. tests/test_engines.py runs them on every engine and compares the rows with DuckDB's, whose figures other
tests hold against exact arithmetic.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from importlib import import_module
from pkgutil import iter_modules
from typing import Any


@dataclass(frozen=True)
class Table:
    """Column names to types (those of harness.TYPES), and rows."""

    columns: dict[str, str]
    rows: list[dict[str, Any]]


@dataclass(frozen=True)
class Case:
    """Tables to load, tables to make from macro calls (in that order), and the calls whose rows are compared.

    With ``is_sound`` false the calls read spells that are none, which the validator refuses to recompute.
    """

    name: str
    tables: dict[str, Table]
    calls: list[str]
    made: dict[str, str] = field(default_factory=dict)
    may_be_empty: bool = False
    is_sound: bool = True


def all_cases() -> list[Case]:
    modules = [import_module(f"{__name__}.{module.name}") for module in iter_modules(__path__)]
    return [case for module in modules for case in module.CASES]
