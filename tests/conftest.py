from __future__ import annotations

import os
from collections.abc import Iterator

import pytest
from defects import CAUGHT
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


@pytest.fixture(scope="session")
def started(tmp_path_factory) -> Iterator[dict[str, Engine]]:
    """The engines that tests have asked for so far; each is started once and stopped at the end."""
    engines: dict[str, Engine] = {}
    yield engines
    for engine in engines.values():
        engine.close()


def _start(name: str, started: dict[str, Engine], tmp_path_factory) -> Engine:
    """Start an engine. In CI a missing one fails; elsewhere it is named in the summary as not run."""
    if name not in started:
        try:
            started[name] = ENGINES[name](tmp_path_factory.mktemp(name))
        except Exception as missing:
            if os.environ.get("CI"):
                raise
            NOT_RUN[name] = (str(missing).splitlines() or [type(missing).__name__])[0]
            pytest.skip(f"{name} is not here")
    return started[name]


@pytest.fixture(scope="session", params=list(ENGINES))
def each_engine(request, started, tmp_path_factory) -> Engine:
    """Every engine in turn."""
    return _start(request.param, started, tmp_path_factory)


@pytest.fixture(scope="session", params=[name for name in ENGINES if name != "duckdb"])
def other_engine(request, started, tmp_path_factory) -> Engine:
    """Every engine but DuckDB in turn, for what is compared with DuckDB."""
    return _start(request.param, started, tmp_path_factory)


@pytest.fixture(scope="session")
def spark(started, tmp_path_factory) -> Engine:
    """Spark, for what only it can show."""
    return _start("spark", started, tmp_path_factory)


def pytest_sessionfinish(session) -> None:
    """Where tests run in several processes, each tells what it found to the one that writes the summary."""
    if hasattr(session.config, "workeroutput"):
        session.config.workeroutput["found"] = {"not_run": NOT_RUN, "caught": CAUGHT}


@pytest.hookimpl(optionalhook=True)
def pytest_testnodedown(node) -> None:
    found = getattr(node, "workeroutput", {}).get("found", {})
    NOT_RUN.update(found.get("not_run", {}))
    CAUGHT.update(found.get("caught", {}))


def pytest_terminal_summary(terminalreporter) -> None:
    for name, why in NOT_RUN.items():
        terminalreporter.write_line(f"ENGINE NOT RUN: {name} ({why})", yellow=True, bold=True)
    if CAUGHT:
        terminalreporter.write_line(
            f"SEEDED DEFECTS: {sum(CAUGHT.values())} of {len(CAUGHT)} caught", bold=True
        )
