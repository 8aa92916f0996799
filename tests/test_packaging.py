"""The wheel: what it carries, and that the demo runs from it without the checkout."""

from __future__ import annotations

import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
BUILD = "import sys; from hatchling.build import build_wheel; print(build_wheel(sys.argv[1]))"
RUN = (
    "import spellcurve.demo, sys; print(spellcurve.demo.__file__); "
    "from spellcurve.cli import app; app(sys.argv[1:])"
)
IN_WHEEL = {
    "validator/spellcurve": "spellcurve",
    "macros": "spellcurve/dbt_package/macros",
    "models": "spellcurve/dbt_package/models",
    "seeds": "spellcurve/dbt_package/seeds",
    "tests/dbt": "spellcurve/dbt_package/tests/dbt",
}


def python(*arguments: str | Path, **options) -> str:
    done = subprocess.run(
        [sys.executable, *map(str, arguments)], capture_output=True, text=True, check=False, **options
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout


@pytest.fixture(scope="module")
def wheel(tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("wheel")
    return folder / python("-c", BUILD, folder, cwd=ROOT).split()[-1]


def test_the_wheel_carries_the_dbt_project_and_the_validator_and_nothing_else(wheel):
    with zipfile.ZipFile(wheel) as archive:
        carried = {name for name in archive.namelist() if ".dist-info/" not in name}
    expected = {"spellcurve/dbt_package/dbt_project.yml"}
    for source, place in IN_WHEEL.items():
        for path in (ROOT / source).rglob("*"):
            if path.is_file() and "__pycache__" not in path.parts:
                expected.add(f"{place}/{path.relative_to(ROOT / source).as_posix()}")
    assert carried == expected


def test_the_demo_runs_from_the_wheel_with_all_its_tests(wheel, tmp_path):
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(tmp_path / "site")
    environment = {**os.environ, "PYTHONPATH": str(tmp_path / "site"), "COLUMNS": "100"}
    printed = python("-c", RUN, "demo", "--members", "50", cwd=tmp_path, env=environment)
    assert printed.startswith(str(tmp_path / "site")), "not the wheel's own code"
    assert "34 of 34 dbt tests passed" in printed
