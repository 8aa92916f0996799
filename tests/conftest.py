from __future__ import annotations

import pytest
from harness import Engine
from hypothesis import HealthCheck, settings

settings.register_profile(
    "spellcurve",
    deadline=None,
    print_blob=True,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)
settings.load_profile("spellcurve")


@pytest.fixture(scope="session")
def engine(tmp_path_factory) -> Engine:
    return Engine(tmp_path_factory.mktemp("engine"))
