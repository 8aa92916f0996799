"""The same input gives the same rows and figures on every engine."""

from __future__ import annotations

import pytest
from corpus import all_cases
from likeness import unlike


@pytest.mark.parametrize("case", all_cases(), ids=lambda case: case.name)
def test_rows_and_figures_are_those_of_duckdb(other_engine, engine, case):
    found = unlike(other_engine, engine, case)
    assert not found, "\n".join(found[:20])
