"""The corpus as a dbt project: each table loaded, each macro call a model, for the validator to check.

A project lives in a scratch folder and depends on the package by `local:`.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

from corpus import Case
from harness import ROOT, Engine

PROJECT = """
name: harrow_lane_proof
version: "1.0.0"
config-version: 2
profile: spellcurve
model-paths: ["models"]
models:
  harrow_lane_proof:
    +materialized: table
"""


@dataclass(frozen=True)
class Proof:
    """A project in a folder, and the case that each model comes from."""

    folder: Path
    cases: dict[str, Case]


def write_project(engine: Engine, folder: Path, cases: list[Case]) -> Proof:
    """Load the tables of the cases and write a model for everything made of them; install the package.

    Tables of two cases may have one name, so each gets the number of its case in front.
    """
    (folder / "models").mkdir(parents=True)
    (folder / "dbt_project.yml").write_text(PROJECT)
    (folder / "packages.yml").write_text(f"packages:\n  - local: {ROOT}\n")
    models = {}
    for number, case in enumerate(cases):
        made = {name: f"c{number}_{name}" for name in case.made}
        loaded = {name: f"c{number}_{name}" for name in case.tables}
        for name, table in case.tables.items():
            engine.load(loaded[name], table.columns, table.rows)
        calls = {made[name]: call for name, call in case.made.items()}
        of_models = [call for call in case.calls if not call.startswith("test_")]
        calls |= {f"c{number}_call_{place}": call for place, call in enumerate(of_models)}
        for model, call in calls.items():
            text = _renamed(call, made, loaded)
            (folder / "models" / f"{model}.sql").write_text("{{ spellcurve." + text + " }}\n")
            models[model] = case
    outcome, said = engine.dbt(["deps"], folder)
    assert outcome.success, said
    return Proof(folder, models)


def _renamed(call: str, made: dict[str, str], loaded: dict[str, str]) -> str:
    """The call, reading the case's own tables and models."""

    def own(found: re.Match[str]) -> str:
        name = found[1]
        return f"ref('{made[name]}')" if name in made else f"'{loaded.get(name, name)}'"

    return re.sub(r"'(\w+)'", own, call)
