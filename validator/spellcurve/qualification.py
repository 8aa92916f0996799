"""Qualifies a warehouse: builds the published reference data there, compares, and tells what was found.

Everything is built in a scratch schema, which is dropped again. Each printed figure is compared with the one
in the warehouse; besides, every row of every reference table is compared with exact fractions, recomputed
from the published observations in the package's own files and not from anything in the warehouse.
"""

from __future__ import annotations

import importlib
import importlib.metadata
import os
import re
import secrets
import signal
import tempfile
import threading
from collections import defaultdict
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from datetime import datetime, timezone
from decimal import Decimal
from pathlib import Path
from typing import Any

from spellcurve.compare import TOLERANCE, Comparison, Disagreement
from spellcurve.package import find_package, read_reference
from spellcurve.project import Model, Project, ProjectError, Rows, WarehouseError

AGREES, DISAGREES, NOT_FOUND = "agrees", "disagrees", "not found"
ENABLED, SCRATCH = "spellcurve_reference", "spellcurve_scratch"
SELECTED = ("path:models/reference", "path:seeds/reference")
#: Models that lay figures side by side and compute none.
SUMMARIES = ("reference_figures", "reference_agreement")
#: Some warehouses cut longer names short, and might then meet a schema that is somebody's.
LONGEST_NAME = 63
_KEPT = "It was kept, as asked for."
_NOT_TOLD = "not told by the warehouse"
#: What may lie between a computed figure and half a unit of the last printed place.
_ROUNDING = Decimal("1e-9")

Announce = Callable[[str, int, int], None]


class QualificationError(Exception):
    """The warehouse cannot be qualified; the message is one sentence for the user."""


@dataclass(frozen=True)
class Source:
    """A data set and its publication; ``data_from_memory``: whether observations were written from memory."""

    data_set: str
    shows: str
    citation: str
    data_from_memory: bool


@dataclass(frozen=True)
class Figure:
    """A printed figure beside the computed one.

    Attributes:
        data_set: as in ``Source``.
        group: the group, or the cause of an incidence; None for all spells together.
        figure: what was printed, for instance survival.
        duration: in units of the data set; None for a figure of the whole.
        printed: as printed; None where printed as not reached.
        decimals: printed decimals.
        computed: by the warehouse; None where not reached or not found.
        verdict: ``agrees``, ``disagrees`` or ``not found``.
        source: where it was printed.
        from_memory: whether it was written down from memory.
    """

    data_set: str
    group: str | None
    figure: str
    duration: int | None
    printed: str | None
    decimals: int
    computed: float | None
    verdict: str
    source: str
    from_memory: bool

    @property
    def agrees(self) -> bool:
        """Whether the computed figure, rounded to the printed decimals, is the printed one."""
        return self.verdict == AGREES

    @property
    def place(self) -> str:
        """Where it belongs, for instance 'survival of remission, 6-MP, at 10'."""
        group = "" if self.group is None else f", {self.group}"
        at = "" if self.duration is None else f", at {self.duration}"
        return f"{self.figure} of {self.data_set}{group}{at}"

    @property
    def sentence(self) -> str:
        """What was found, in one sentence."""
        if self.verdict == NOT_FOUND:
            return f"{self.place} was not found in the warehouse; {_shown(self.printed)} was printed."
        return f"{self.place} is {_shown(self.computed)}, and {_shown(self.printed)} was printed."


@dataclass(frozen=True)
class QualifiedModel:
    """A reference table compared with exact fractions, row by row."""

    model: str
    macro: str
    comparison: Comparison


@dataclass(frozen=True)
class Environment:
    """What was qualified: names and versions, each a text as the software tells it."""

    adapter: str
    adapter_version: str
    engine_version: str
    dbt_version: str
    package_version: str
    validator_version: str
    profile: str
    target: str


@dataclass(frozen=True)
class Qualification:
    """What was found.

    Attributes:
        moment: when, in UTC.
        environment: engine, adapter and versions.
        sources: the publications, one a data set.
        figures: every printed figure, in the order of the package's file.
        models: every reference table that a macro makes, in the order of dbt's graph.
        tests_run: dbt tests run.
        tests_failed: names of those that did not pass.
        schema: the scratch schema.
        left_behind: why the scratch schema is still there, in one sentence; empty if it was dropped.
    """

    moment: datetime
    environment: Environment
    sources: tuple[Source, ...]
    figures: tuple[Figure, ...]
    models: tuple[QualifiedModel, ...]
    tests_run: int
    tests_failed: tuple[str, ...]
    schema: str
    left_behind: str = ""

    @property
    def wrong(self) -> list[str]:
        """A sentence on everything that is wrong."""
        printed = [one.sentence for one in self.figures if not one.agrees]
        exact = [
            f"{one.model}: {problem.sentence}"
            for one in self.models
            for problem in one.comparison.disagreements
        ]
        tests = [f"The dbt test {name} did not pass." for name in self.tests_failed]
        return [*printed, *exact, *tests]

    @property
    def agrees(self) -> bool:
        """Whether every figure and row agrees and every test passed."""
        return bool(self.figures and self.models and self.tests_run) and not self.wrong

    @property
    def exact_figures(self) -> int:
        """Figures compared with exact fractions."""
        return sum(one.comparison.figures for one in self.models)

    @property
    def largest_difference(self) -> float:
        """Largest relative difference from exact fractions."""
        return max((one.comparison.largest_difference for one in self.models), default=0.0)


def qualify(
    project_dir: str | Path = ".",
    *,
    profiles_dir: str | Path | None = None,
    profile: str | None = None,
    target: str | None = None,
    package: str | Path | None = None,
    keep: bool = False,
    announce: Announce = lambda doing, done, of: None,
) -> Qualification:
    """Qualify the warehouse of a dbt project with published data.

    Loads a few hundred rows of published observations into a scratch schema named after the target's schema,
    ``spellcurve`` and random letters; builds curves, incidences, tables and tests from them; compares; and
    drops the schema, also after an error or an interruption. Nothing is written anywhere else.
    ``spellcurve.certificate.write_certificate`` makes files of what was found.

    Args:
        project_dir: folder of a dbt project, whose profile is used; needs not exist if ``profile`` is given.
        profiles_dir: folder of profiles.yml; None looks where dbt does, and in the project's folder.
        profile: of profiles.yml; None takes the project's.
        target: of the profile; None takes its default.
        package: folder of the package's dbt project; None takes the one that the validator came with.
        keep: leave the scratch schema, to look at it.
        announce: is called with what is being done, how many steps are done, and of how many.

    Returns:
        every figure and every table, whether they agree or not. Durations are in whole units of their data
        set, shares between 0 and 1.

    Raises:
        QualificationError: the warehouse cannot be reached or written to, or a model cannot be built.
        KeyboardInterrupt: it was interrupted; what became of the scratch schema is its text.
    """
    try:
        folder = Path(package).expanduser().resolve() if package is not None else find_package()
        own_profile, own_profiles_dir = _profile(Path(project_dir), profiles_dir, profile)
        sources = tuple(_source(row) for row in read_reference(folder, "sources"))
        published = read_reference(folder, "published_figures")
        with tempfile.TemporaryDirectory(prefix="spellcurve-") as scratch:
            warehouse = _Warehouse(
                folder,
                Path(scratch),
                own_profiles_dir,
                own_profile,
                target,
                {ENABLED: True, SCRATCH: f"spellcurve_{secrets.token_hex(4)}"},
            )
            with _settings_put_aside(), _interruptions(warehouse):
                return _qualify(warehouse, folder, sources, published, keep, announce)
    except (ProjectError, FileNotFoundError) as error:
        raise QualificationError(str(error)) from error


def _qualify(
    warehouse: _Warehouse,
    folder: Path,
    sources: tuple[Source, ...],
    published: Sequence[Mapping[str, str]],
    keep: bool,
    announce: Announce,
) -> Qualification:
    steps = (
        "Reading the package with dbt",
        "Loading the published observations",
        "Building curves, tables and tests",
        "Running the package's tests",
        "Comparing with printed figures and exact fractions",
    )

    def step(place: int) -> None:
        warehouse.stop_if_interrupted()
        announce(steps[place], place, len(steps))

    step(0)
    warehouse.read()
    warehouse.claim()
    try:
        step(1)
        warehouse.build("seed")
        step(2)
        warehouse.build("run")
        step(3)
        tests = warehouse.build("test")
        step(4)
        models = warehouse.models(["path:models/reference"])
        with warehouse.connection():
            environment = warehouse.environment()
            figures = _figures(published, warehouse.rows_of("reference_agreement"))
            checked = _compare_models(warehouse, models, folder)
        warehouse.stop_if_interrupted()
    except BaseException as error:
        left_behind = _KEPT if keep else warehouse.drop()
        told = f"The scratch schema {warehouse.schema} was dropped."
        if left_behind:
            told = f"The scratch schema {warehouse.schema} is still there: {left_behind}"
        if isinstance(error, KeyboardInterrupt):
            raise KeyboardInterrupt(told) from None
        if isinstance(error, ProjectError) and left_behind:
            raise ProjectError(f"{error} {told}") from error
        raise
    left_behind = _KEPT if keep else warehouse.drop()
    announce(steps[-1], len(steps), len(steps))
    return Qualification(
        moment=datetime.now(timezone.utc).replace(microsecond=0),
        environment=environment,
        sources=sources,
        figures=figures,
        models=checked,
        tests_run=len(tests),
        tests_failed=tuple(one.node.name for one in tests if one.status not in ("pass", "warn")),
        schema=warehouse.schema,
        left_behind=left_behind,
    )


def _profile(
    project_dir: Path, profiles_dir: str | Path | None, profile: str | None
) -> tuple[str, Path | None]:
    """The profile of the user's project, and where profiles.yml is if that is not for dbt to find."""
    import yaml  # dbt depends on it

    project_dir = project_dir.expanduser()
    place = Path(profiles_dir).expanduser().resolve() if profiles_dir is not None else None
    if place is None and "DBT_PROFILES_DIR" not in os.environ and (project_dir / "profiles.yml").is_file():
        place = project_dir.resolve()
    profile = profile or os.environ.get("DBT_PROFILE")
    if profile:
        return profile, place
    path = project_dir / "dbt_project.yml"
    if not path.is_file():
        raise QualificationError(
            f"There is no dbt_project.yml in {project_dir.resolve()} to tell the profile; run this in a dbt "
            "project, name its folder with --project-dir, or give --profile."
        )
    try:
        content = yaml.safe_load(path.read_text(encoding="utf-8"))
        named = content["profile"]
    except (yaml.YAMLError, KeyError, TypeError, UnicodeDecodeError):
        named = None
    if not isinstance(named, str) or "{{" in named:
        raise QualificationError(f"{path} names no profile that can be read; give one with --profile.")
    return named, place


def _source(row: Mapping[str, str]) -> Source:
    return Source(row["data_set"], row["shows"], row["citation"], row["data_from_memory"] == "yes")


class _Warehouse(Project):
    """The package's own dbt project on the user's warehouse; all that it writes is in one scratch schema."""

    #: Set by a signal: dbt makes an error of its own of an interruption, and Python may lose one.
    interrupted = False
    #: Whether the scratch schema is ours to drop.
    claimed = False

    def stop_if_interrupted(self) -> None:
        """Python loses an interruption that comes while it destroys an object; here it is found again."""
        if self.interrupted:
            raise KeyboardInterrupt

    def dbt(self, command: str, *arguments: str, variables: Mapping[str, Any] | None = None) -> Any:
        """As in ``Project``; an interruption goes through as one."""
        try:
            return super().dbt(command, *arguments, variables=variables)
        except ProjectError:
            if self.interrupted:
                raise KeyboardInterrupt from None
            raise

    def read(self) -> None:
        """Read the package, find the scratch schema and connect."""
        self._manifest = self.dbt("parse", "--no-partial-parse")
        self._connect()
        places = {
            (node.database, node.schema)
            for node in self._manifest.nodes.values()
            if str(node.resource_type) in ("model", "seed")
        }
        if len(places) != 1 or not next(iter(places))[1].endswith(f"_{self._variables[SCRATCH]}"):
            raise ProjectError(
                "The reference models would not all be built in a scratch schema, so nothing was done; use "
                f"the package of the validator's version, which {self.folder} is not."
            )
        ((self.database, self.schema),) = places
        if len(self.schema) > LONGEST_NAME:
            raise ProjectError(
                f"The scratch schema would be named {self.schema}, longer than the {LONGEST_NAME} letters "
                "that every warehouse keeps; use a target with a shorter schema."
            )

    def claim(self) -> None:
        """Make sure that the scratch schema is not there yet; from then on it is ours."""
        with self.connection():
            try:
                there = self._adapter.check_schema_exists(self.database, self.schema)
            except Exception as error:  # every adapter raises its own
                raise ProjectError(f"The warehouse cannot be reached: {_one_line(error)}") from error
        if there:
            raise ProjectError(f"The scratch schema {self.schema} is there already; run this again.")
        self.claimed = True

    def build(self, command: str) -> Sequence[Any]:
        """Run dbt on the reference part and give the results, node by node; a failed test is a result."""
        chosen = [part for selected in SELECTED for part in ("--select", selected)]
        results: Sequence[Any] = getattr(self.dbt(command, *chosen), "results", None) or []
        done = ("success", "pass", "warn", "fail")
        broken = [one for one in results if one.status not in done]
        told = next((one for one in broken if one.status != "skipped"), None)
        if told is not None and command != "test":
            raise ProjectError(f"{told.node.name} could not be built: {_one_line(told.message)}")
        if (broken and command != "test") or not results:
            raise ProjectError(f"dbt {command} found nothing that it could do in {self.folder}.")
        return results

    def rows_of(self, model: str) -> Rows:
        """All rows of one of the package's models."""
        node = self._manifest.nodes[f"model.spellcurve.{model}"]
        return self.query(f"select * from {node.relation_name}")

    def environment(self) -> Environment:
        """Names and versions; a connection has to be open."""
        from spellcurve import __version__

        config = self._adapter.config
        return Environment(
            adapter=self.adapter,
            adapter_version=_version_of_adapter(self.adapter),
            engine_version=self._engine_version(),
            dbt_version=importlib.metadata.version("dbt-core"),
            package_version=str(config.version),
            validator_version=__version__,
            profile=str(config.profile_name),
            target=str(config.target_name),
        )

    def _engine_version(self) -> str:
        for function in ("version()", "current_version()"):
            try:
                rows = self.query(f"select {function} as engine_version")
            except WarehouseError:
                continue
            return _one_line(rows[0]["engine_version"])
        return _NOT_TOLD

    def drop(self) -> str:
        """Drop the scratch schema; says in one sentence why that failed, or nothing."""
        if not self.claimed:
            return ""
        reason = ""
        with _undisturbed():
            self.interrupted = False
            for attempt in range(2):
                try:
                    if attempt:
                        self.dbt("parse")  # an interruption may have left dbt without an adapter
                    self._connect()
                    return self._drop()
                except Exception as error:  # every adapter raises its own
                    reason = _one_line(error)
        return f"It could not be dropped ({reason}); drop it yourself."

    def _drop(self) -> str:
        relation = self._adapter.Relation.create(database=self.database, schema=self.schema)
        with self.connection():
            self._adapter.drop_schema(relation)
        with self.connection():
            there = self._adapter.check_schema_exists(self.database, self.schema)
        return "It is still there after it was dropped; drop it yourself." if there else ""


#: Settings of dbt in the environment that say where to connect; all others are put aside.
_KEPT_SETTINGS = ("PROFILES_DIR", "PROFILE", "TARGET")


@contextmanager
def _settings_put_aside() -> Iterator[None]:
    """Keep the user's settings of dbt out: stored failures would be written elsewhere, warnings be errors.

    Only variables that dbt itself reads are put aside; a profile may read others that begin like them.
    """
    from dbt.cli.main import cli

    parameters = [*cli.params, *(one for command in cli.commands.values() for one in command.params)]
    names = set()
    for parameter in parameters:
        given = parameter.envvar or ()
        names |= {given} if isinstance(given, str) else set(given)
    kept = {f"{start}{name}" for name in _KEPT_SETTINGS for start in ("DBT_", "DBT_ENGINE_")}
    aside = {name: os.environ.pop(name) for name in names - kept if name in os.environ}
    try:
        yield
    finally:
        os.environ.update(aside)


def _version_of_adapter(adapter: str) -> str:
    try:
        return str(importlib.import_module(f"dbt.adapters.{adapter}.__version__").version)
    except (ImportError, AttributeError):
        return "unknown"


@contextmanager
def _interruptions(warehouse: _Warehouse) -> Iterator[None]:
    """Note an interruption, and take a request to end, as CI sends, for one, so that all is cleaned up."""

    def interrupt(number: int, frame: Any) -> None:
        warehouse.interrupted = True
        raise KeyboardInterrupt

    with _handled(interrupt):
        yield


@contextmanager
def _undisturbed() -> Iterator[None]:
    with _handled(signal.SIG_IGN):
        yield


@contextmanager
def _handled(handler: Any) -> Iterator[None]:
    if threading.current_thread() is not threading.main_thread():  # signals go to the main thread alone
        yield
        return
    before = {number: signal.signal(number, handler) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield
    finally:
        for number, former in before.items():
            signal.signal(number, former if former is not None else signal.SIG_DFL)


# Printed figures


def _figures(published: Sequence[Mapping[str, str]], computed: Rows) -> tuple[Figure, ...]:
    """Judge every printed figure by itself; the verdict in the warehouse has to be the same."""
    found: dict[tuple[str, ...], Rows] = defaultdict(list)
    for row in computed:
        found[_key(row)].append(row)
    figures = [_judged(row, found.pop(_key(row), [])) for row in published]
    for rows in found.values():  # in the warehouse, and not in the package's file
        for row in rows:
            printed = {name: "" if value is None else str(value) for name, value in row.items()}
            figures.append(replace(_judged(printed, []), verdict=DISAGREES))
    return tuple(figures)


def _key(row: Mapping[str, Any]) -> tuple[str, ...]:
    names = ("data_set", "group_value", "figure", "duration")
    return tuple("" if row[name] is None else str(row[name]) for name in names)


def _judged(row: Mapping[str, str], found: Rows) -> Figure:
    printed, decimals = row["printed_value"] or None, int(row["printed_decimals"])
    computed = found[0]["computed_value"] if found else None
    if not found or found[0]["verdict"] == NOT_FOUND:
        verdict = NOT_FOUND
    elif len(found) == 1 and found[0]["verdict"] == AGREES and _rounds_to(computed, printed, decimals):
        verdict = AGREES
    else:
        verdict = DISAGREES
    return Figure(
        data_set=row["data_set"],
        group=row["group_value"] or None,
        figure=row["figure"],
        duration=int(row["duration"]) if row["duration"] else None,
        printed=printed,
        decimals=decimals,
        computed=computed,
        verdict=verdict,
        source=row["source"],
        from_memory=row["from_memory"] == "yes",
    )


def _rounds_to(computed: float | None, printed: str | None, decimals: int) -> bool:
    if computed is None or printed is None:
        return computed is None and printed is None
    difference = abs(Decimal(computed) - Decimal(printed))
    return difference.is_finite() and difference <= Decimal(5).scaleb(-decimals - 1) + _ROUNDING


# Exact fractions


def _compare_models(
    warehouse: _Warehouse, models: Sequence[Model], folder: Path
) -> tuple[QualifiedModel, ...]:
    from spellcurve.exact_reference import ExactReference

    exact = ExactReference(folder, {model.name: model.calls[0].provenance for model in models if model.calls})
    checked = []
    for model in models:
        if model.name in SUMMARIES:
            continue
        if not model.calls:
            checked.append(QualifiedModel(model.name, "?", _without_provenance(model.name)))
            continue
        try:
            comparison = exact.compare(model.name, warehouse.rows_of(model.name), TOLERANCE)
        except (KeyError, ValueError, TypeError, AttributeError) as error:
            raise ProjectError(
                f"{model.name} cannot be recomputed from the package's files ({_one_line(error)}); use the "
                "package of the validator's version."
            ) from error
        checked.append(QualifiedModel(model.name, model.calls[0].provenance.macro, comparison))
    return tuple(checked)


def _without_provenance(model: str) -> Comparison:
    sentence = f"The compiled SQL of {model} does not say what it computes."
    wrong = Disagreement("missing row", None, None, None, None, None, sentence)
    return Comparison(disagreements=[wrong])


def _shown(value: Any) -> str:
    return "not reached" if value is None else str(value)


def _one_line(message: object) -> str:
    return re.sub(r"\s+", " ", str(message)).strip()
