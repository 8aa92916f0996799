from __future__ import annotations

import os
from collections.abc import Iterator

import pytest
from harness import ENGINES, DuckDB, Engine
from hypothesis import HealthCheck, settings

settings.register_profile(
    "spellcurve",
    deadline=None,
    print_blob=True,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)
settings.load_profile("spellcurve")

NOT_RUN: dict[str, str] = {}


@pytest.fixture(scope="session")
def engine(tmp_path_factory) -> Engine:
    """DuckDB, for the tests that try many examples."""
    return DuckDB(tmp_path_factory.mktemp("duckdb"))


@pytest.fixture(scope="session", params=list(ENGINES))
def each_engine(request, tmp_path_factory) -> Iterator[Engine]:
    """Every engine in turn. In CI a missing one fails; elsewhere it is named in the summary as not run."""
    try:
        engine = ENGINES[request.param](tmp_path_factory.mktemp(request.param))
    except Exception as missing:
        if os.environ.get("CI"):
            raise
        NOT_RUN[request.param] = str(missing).splitlines()[0]
        pytest.skip(f"{request.param} is not here")
    yield engine
    engine.close()


def pytest_terminal_summary(terminalreporter) -> None:
    for name, why in NOT_RUN.items():
        terminalreporter.write_line(f"ENGINE NOT RUN: {name} ({why})", yellow=True, bold=True)
