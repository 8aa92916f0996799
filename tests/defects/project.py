"""The project of the cases: written and parsed once, then built and checked as often as there are defects.

A defect is applied to a copy of the macros that dbt holds in memory, never to a file.
"""

from __future__ import annotations

import pickle
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from harness import ROOT, DuckDB
from spellcurve.check import SAMPLE, CheckedCall, _check_models
from spellcurve.compare import TOLERANCE
from spellcurve.project import Project

from defects.cases import MODELS, TABLES

PROJECT = """
name: harrow_lane_proof
version: "1.0.0"
config-version: 2
profile: spellcurve
models:
  +materialized: table
"""


@dataclass(frozen=True)
class Defect:
    """A mistake in a macro.

    Attributes:
        name: what is wrong.
        file: of the macro, below macros/.
        old: text that stands once in the macros of that file.
        new: what takes its place.
        models: names of models that show it.
    """

    name: str
    file: str
    old: str
    new: str
    models: tuple[str, ...]


class BuildError(Exception):
    """A model could not be built; the text is the warehouse's."""


class KeptDuckDB(DuckDB):
    """DuckDB with a database file, for dbt to build in."""

    def output(self) -> dict[str, Any]:
        return {"type": "duckdb", "path": str(self.scratch / "proof.duckdb"), "threads": 1}

    @property
    def connection(self) -> Any:
        import duckdb

        return duckdb.connect(str(self.scratch / "proof.duckdb"))

    def execute(self, sql: str, values: Sequence[Any] = ()) -> None:
        with self.connection as connection:
            connection.execute(sql, values or None)


class ParsedProject(Project):
    """A project whose manifest is given, so that nothing is parsed again; `built` is what dbt built last of it."""

    def __init__(self, manifest: Any, *arguments: Any, **options: Any) -> None:
        super().__init__(*arguments, **options)
        self._manifest = manifest
        self.built: Any = None

    def dbt(self, command: str, *arguments: str, variables: Mapping[str, Any] | None = None) -> Any:
        if command == "parse":
            return self._manifest
        if command == "compile":
            if self.built is not None:  # it was compiled to be built
                return self.built
            arguments = ("--no-write-json", *arguments)  # writing the manifest takes most of the time
        return super().dbt(command, *arguments, variables=variables)


class Proof:
    """The tables loaded and the models parsed, in a scratch folder."""

    def __init__(self, scratch: Path) -> None:
        self.engine = KeptDuckDB(scratch)
        self.folder = scratch / "project"
        (self.folder / "models").mkdir(parents=True)
        (self.folder / "dbt_project.yml").write_text(PROJECT)
        (self.folder / "packages.yml").write_text(f"packages:\n  - local: {ROOT}\n")
        for name, call in MODELS.items():
            (self.folder / "models" / f"{name}.sql").write_text("{{ spellcurve." + call + " }}\n")
        for name, table in TABLES.items():
            self.engine.load(name, table.columns, table.rows)
        outcome, said = self.engine.dbt(["deps"], self.folder)
        assert outcome.success, said
        project = Project(self.folder, scratch / "parsed", scratch, target="duckdb")
        self._manifest = project.dbt("parse", "--no-partial-parse")
        self._kept = pickle.dumps(self._manifest)  # read again sooner than it is copied

    def project(self, defect: Defect | None = None) -> ParsedProject:
        """The project with a copy of the macros, one of them with the defect."""
        manifest = pickle.loads(self._kept)
        if defect is not None:
            (macro,) = self.places(defect)
            found = manifest.macros[macro]
            found.macro_sql = found.macro_sql.replace(defect.old, defect.new)
        scratch = self.engine.scratch
        return ParsedProject(manifest, self.folder, scratch / "run", scratch, target="duckdb")

    def places(self, defect: Defect) -> list[str]:
        """The macro in which the text of a defect stands, once for each time that it does."""
        return [
            name
            for name, macro in self._manifest.macros.items()
            if macro.package_name == "spellcurve" and macro.original_file_path == f"macros/{defect.file}"
            for _ in range(macro.macro_sql.count(defect.old))
        ]

    def macros_of(self, model: str) -> set[str]:
        """Every macro that a model calls, by itself or through others."""
        waiting = [f"model.harrow_lane_proof.{model}"]
        found: set[str] = set()
        while waiting:
            name = waiting.pop()
            node = self._manifest.nodes.get(name) or self._manifest.macros[name]
            new = {*node.depends_on.macros, *getattr(node.depends_on, "nodes", ())} - found
            found |= new
            waiting += new
        return {name for name in found if name.startswith("macro.")}

    def build(
        self, project: ParsedProject, models: Sequence[str], variables: Mapping[str, Any] | None = None
    ) -> None:
        """Build models and what they read.

        Raises:
            BuildError: the warehouse refused one.
        """
        choice = [part for name in models for part in ("--select", f"+{name}")]
        done = project.dbt("run", "--no-write-json", "--no-populate-cache", *choice, variables=variables)
        for result in done.results:
            if result.status != "success":
                raise BuildError(f"{result.node.name}: {result.message}")
        project.built = None if variables else done

    def check(self, project: Project, models: Sequence[str]) -> list[CheckedCall]:
        """What `spellcurve check` says of models."""
        found = project.models(models)
        assert sorted(model.name for model in found) == sorted(models)
        return list(_check_models(project, found, TOLERANCE, SAMPLE, lambda doing, done, of: None))
