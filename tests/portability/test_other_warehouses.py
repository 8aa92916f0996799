"""DuckDB's figures: on six warehouses by translation, and on the library of ClickHouse."""

from __future__ import annotations

import pytest
from corpus import all_cases
from harness import DuckDB
from likeness import unlike
from translated import DUMMIES, ClickHouse, Translated

CASES = all_cases()


@pytest.fixture(scope="session")
def engine(tmp_path_factory):
    return DuckDB(tmp_path_factory.mktemp("duckdb"))


@pytest.fixture(scope="session", params=list(DUMMIES))
def warehouse(request, tmp_path_factory):
    scratch = tmp_path_factory.mktemp(request.param)
    engine = ClickHouse(scratch) if request.param == "clickhouse" else Translated(request.param, scratch)
    engine.render_all([call for case in CASES for call in (*case.made.values(), *case.calls)])
    yield engine
    engine.close()


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_rows_and_figures_are_those_of_duckdb(warehouse, engine, case):
    found = unlike(warehouse, engine, case)
    assert not found, "\n".join(found[:20])
