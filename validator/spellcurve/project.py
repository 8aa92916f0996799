"""A user's dbt project: which models call the package, and what the warehouse says, by dbt's own adapter."""

from __future__ import annotations

import json
import re
from collections.abc import Collection, Iterator, Mapping, Sequence
from contextlib import contextmanager, redirect_stdout
from dataclasses import dataclass, field
from decimal import Decimal
from io import StringIO
from pathlib import Path
from typing import Any

from spellcurve.provenance import Provenance, find_provenance

PACKAGE = "spellcurve"

Rows = list[dict[str, Any]]


class ProjectError(Exception):
    """The project cannot be read, compiled or queried; the message is one sentence for the user."""


class WarehouseError(ProjectError):
    """One query failed."""


@dataclass(frozen=True)
class Call:
    """One call of a public macro inside a compiled model.

    Attributes:
        provenance: what the call computes.
        sql: the compiled call, with whatever the model's SQL has to say before it (its CTEs).
        whole: whether the call is all there is to the model, so that the model's table holds its rows.
        opening, closing: the SQL around the call where it stands inside a CTE, else empty; a select between
            the two can read the CTEs that the call can read.
        ctes: the names that the call may read and that are no relations.
    """

    provenance: Provenance
    sql: str
    whole: bool
    opening: str = ""
    closing: str = ""
    ctes: frozenset[str] = frozenset()


@dataclass(frozen=True)
class Model:
    """A compiled model that calls the package.

    Attributes:
        name: as in the project, with its package in front where that is another one.
        path: of its file, from the root of the project it belongs to.
        relation: the table or view it makes, as it stands in SQL; None for an ephemeral model.
        sql: compiled SQL.
        calls: the macros it calls, in order; those of a model that cannot be read are none.
    """

    unique_id: str
    name: str
    path: str
    relation: str | None
    sql: str
    calls: tuple[Call, ...] = field(default=())


def find_calls(sql: str, where: str) -> tuple[Call, ...]:
    """Find the calls in a compiled model, in order; errors as ``find_provenance``.

    A call which is all of the model is whole. Any other has to stand in parentheses, as the body of a CTE
    or a subquery does; everything up to its closing parenthesis is its SQL. Calls of ephemeral models,
    whose SQL dbt puts in front, are left to those.
    """
    injected = _injected(sql)
    places = []
    end = 0
    for provenance in find_provenance(sql, where):
        start = sql.index("/* spellcurve {", end)
        end = sql.index("*/", start) + 2
        if not any(start in span for span in injected):
            places.append((provenance, start))
    return tuple(_call(sql, provenance, start, len(places) == 1) for provenance, start in places)


def _call(sql: str, provenance: Provenance, start: int, alone: bool) -> Call:
    before = _code(sql[:start])
    depth, close = _depth(sql, start), _closing(sql, start)
    if depth == 0 and alone and not before.strip():
        return Call(provenance, sql, whole=True)
    if depth == 0:
        return Call(provenance, "", False)
    named = re.search(r"([\w$]+|\"[^\"]+\"|`[^`]+`)\s+as\s+\(\s*$", before, re.IGNORECASE)
    if named is None or depth > 1:
        return Call(provenance, sql[start:close], False)
    opening, closing = sql[:start], f") select * from {named[1]}"
    ctes = {name.lower() for name in re.findall(r"([\w$]+)\s+as\s+\(", before)} - {named[1].lower()}
    return Call(provenance, opening + sql[start:close] + closing, False, opening, closing, frozenset(ctes))


def _injected(sql: str) -> list[range]:
    """Where dbt has put the SQL of ephemeral models: it is theirs, whatever it calls."""
    heads = re.finditer(r"\b__dbt__cte__\w+\s+as\s+\(", sql)
    return [range(head.end(), _closing(sql, head.end())) for head in heads]


_TOKEN = re.compile(r"/\*.*?\*/|--[^\n]*|'(?:[^']|'')*'|\"[^\"]*\"|`[^`]*`|[()]", re.DOTALL)


def _depth(sql: str, until: int) -> int:
    """How many parentheses are open at a place, those in comments and texts not counted."""
    depth = 0
    for token in _TOKEN.finditer(sql, 0, until):
        depth += {"(": 1, ")": -1}.get(token[0], 0)
    return depth


def _closing(sql: str, start: int) -> int:
    """Where the parentheses that are open at a place are closed, or the end."""
    depth = 0
    for token in _TOKEN.finditer(sql, start):
        depth += {"(": 1, ")": -1}.get(token[0], 0)
        if depth < 0:
            return token.start()
    return len(sql)


def _code(sql: str) -> str:
    """SQL without its comments."""
    return _TOKEN.sub(lambda token: " " if token[0].startswith(("/*", "--")) else token[0], sql)


class Project:
    """A dbt project as its own dbt sees it: profile, target and variables included.

    Nothing is written to the warehouse, and nothing in the project but what dbt itself keeps there.

    Args:
        folder: of dbt_project.yml.
        scratch: a folder for dbt's compiled files and its log, so that the project's own stay as they are.
        profiles_dir, profile, target: as for dbt; None leaves the choice to dbt.
        variables: as for ``dbt --vars``.
    """

    def __init__(
        self,
        folder: Path,
        scratch: Path,
        profiles_dir: Path | None = None,
        profile: str | None = None,
        target: str | None = None,
        variables: Mapping[str, Any] | None = None,
    ) -> None:
        self.folder = folder.expanduser().resolve()
        self.scratch = scratch
        if not (self.folder / "dbt_project.yml").is_file():
            raise ProjectError(
                f"There is no dbt_project.yml in {self.folder}; run this in a dbt project, or name its "
                "folder with --project-dir."
            )
        self._options = ["--project-dir", str(self.folder), "--target-path", str(scratch / "target")]
        self._options += ["--log-path", str(scratch / "logs")]
        for name, value in (("--profiles-dir", profiles_dir), ("--profile", profile), ("--target", target)):
            if value is not None:
                self._options += [name, str(value)]
        self._variables = dict(variables or {})
        self._adapter: Any = None
        self._manifest: Any = None
        self._macros: dict[tuple[Any, ...], str] = {}

    # dbt

    def dbt(self, command: str, *arguments: str, variables: Mapping[str, Any] | None = None) -> Any:
        """Run dbt and give what its runner gives; errors of dbt itself are raised, failed nodes are not.

        Raises:
            ProjectError: dbt could not run the command.
        """
        from dbt.cli.main import dbtRunner

        given = self._variables | dict(variables or {})
        settings = [
            "--log-level", "none",
            "--log-level-file", "debug",
            "--no-use-colors",
            "--no-use-colors-file",
            "--no-send-anonymous-usage-stats",
        ]  # fmt: skip
        own = [*self._options, *(["--vars", json.dumps(given)] if given else [])]
        with redirect_stdout(StringIO()):
            done = dbtRunner(manifest=self._manifest).invoke([*settings, command, *arguments, *own])
        if isinstance(done.exception, KeyboardInterrupt):
            raise done.exception
        if done.exception is not None:
            raise ProjectError(f"dbt {command} could not run: {_one_line(done.exception)}")
        return done.result

    def models(self, select: Sequence[str] = (), exclude: Sequence[str] = ()) -> list[Model]:
        """Compile the selected models that call the package, and name them.

        Models that a selected one reads curves or spells from are compiled too; ``made_by`` finds them.

        Raises:
            ProjectError: dbt cannot read or compile the project.
        """
        manifest = self._manifest = self.dbt("parse", "--no-partial-parse")  # read once: it takes seconds
        choice = [*_repeated("--select", select), *_repeated("--exclude", exclude)]
        listed = self.dbt(
            "ls", "--resource-type", "model", "--output", "json", "--output-keys", "unique_id", *choice
        )
        chosen = {json.loads(line)["unique_id"] for line in listed or [] if line.startswith("{")}
        callers = {unique_id for unique_id, node in manifest.nodes.items() if self._calls_package(node)}
        wanted = chosen & callers
        if not wanted:
            return []
        needed = set(wanted)
        for unique_id in wanted:
            needed |= {one for one in _ancestors(manifest, unique_id) if self._is_read(one, callers)}
        names = [f"fqn:{'.'.join(manifest.nodes[unique_id].fqn)}" for unique_id in sorted(needed)]
        compiled = self.dbt("compile", "--no-write-json", "--select", *names)
        self._compiled = {}
        for result in compiled.results:
            node = result.node
            if node.unique_id not in needed:
                continue
            if result.status not in ("success", "pass"):
                raise ProjectError(f"dbt could not compile {node.name}: {_one_line(result.message)}")
            self._compiled[node.unique_id] = self._model(node, node.unique_id in callers)
        self._connect()
        return [self._compiled[unique_id] for unique_id in self._compiled if unique_id in wanted]

    def _model(self, node: Any, calls: bool) -> Model:
        own = node.package_name == self._manifest.metadata.project_name
        name = node.name if own else f"{node.package_name}.{node.name}"
        ephemeral = node.config.materialized == "ephemeral"
        found = find_calls(node.compiled_code, name) if calls else ()
        relation = None if ephemeral else node.relation_name
        return Model(node.unique_id, name, node.original_file_path, relation, node.compiled_code, found)

    def _calls_package(self, node: Any) -> bool:
        """Whether a model calls a macro of the package, by itself or through a macro of its own."""
        if str(node.resource_type) != "model" or node.language != "sql":
            return False
        seen: set[str] = set()
        waiting = list(node.depends_on.macros)
        while waiting:
            name = waiting.pop()
            if name.startswith(f"macro.{PACKAGE}."):
                return True
            if name not in seen and name in self._manifest.macros:
                seen.add(name)
                waiting += self._manifest.macros[name].depends_on.macros
        return False

    def _is_read(self, unique_id: str, callers: Collection[str]) -> bool:
        node = self._manifest.nodes.get(unique_id)
        if node is None or str(node.resource_type) != "model":
            return False
        return unique_id in callers or node.config.materialized == "ephemeral"

    def made_by(self, relation: str) -> Model | None:
        """The compiled model that makes a relation, named as in SQL, or None."""
        for model in self._compiled.values():
            if model.relation == relation or (
                model.relation is None and relation == f"__dbt__cte__{model.unique_id.rsplit('.', 1)[-1]}"
            ):
                return model
        return None

    # The warehouse

    def _connect(self) -> None:
        from dbt.adapters.factory import FACTORY

        self._adapter = FACTORY.adapters[self._manifest.metadata.adapter_type]

    @contextmanager
    def connection(self) -> Iterator[None]:
        """Keep one connection open; queries have to run inside."""
        with self._adapter.connection_named(PACKAGE):
            yield

    @property
    def adapter(self) -> str:
        """The type of the adapter, for instance duckdb."""
        return str(self._manifest.metadata.adapter_type)

    def query(self, sql: str) -> Rows:
        """Run a select through the adapter; names of columns are in lower case, whole numbers are int.

        Raises:
            WarehouseError: the warehouse refused it.
        """
        try:
            with redirect_stdout(StringIO()):
                _, table = self._adapter.execute(sql, fetch=True)
        except Exception as error:  # every adapter raises its own
            raise WarehouseError(_one_line(error)) from error
        names = [name.lower() for name in table.column_names]
        return [dict(zip(names, map(_plain, row.values()), strict=True)) for row in table.rows]

    def macro(self, name: str, *arguments: Any, package: str = PACKAGE) -> str:
        """What a macro that only writes SQL makes of these arguments on this warehouse."""
        key = (package, name, *map(repr, arguments))
        if key not in self._macros:
            found = self._manifest.macros.get(f"macro.{package}.{name}")
            if found is None:
                raise ProjectError(
                    f"The {package} package has no macro {name}; install the validator's version of it."
                )
            names = re.match(r"\s*\{%-?\s*macro\s+\w+\s*\(([^)]*)\)", found.macro_sql)
            wanted = [one.split("=")[0].strip() for one in names[1].split(",")] if names else []
            given = dict(zip(wanted, arguments, strict=False))
            self._macros[key] = str(
                self._adapter.execute_macro(
                    name, macro_resolver=self._manifest, project=package, kwargs=given
                )
            ).strip()
        return self._macros[key]

    def column(self, name: str) -> str:
        """A column as the package writes it in SQL."""
        return self.macro("_column", name)


def _repeated(option: str, values: Sequence[str]) -> list[str]:
    return [part for value in values for part in (option, value)]


def _ancestors(manifest: Any, unique_id: str) -> set[str]:
    found: set[str] = set()
    waiting = [unique_id]
    while waiting:
        for parent in getattr(manifest.nodes[waiting.pop()].depends_on, "nodes", ()):
            if parent not in found and parent in manifest.nodes:
                found.add(parent)
                waiting.append(parent)
    return found


def _plain(value: Any) -> Any:
    """Undo what carries numbers from the adapter: a Decimal becomes int where it is whole, else float."""
    if isinstance(value, Decimal):
        return int(value) if value.is_finite() and value == value.to_integral_value() else float(value)
    return value


def _one_line(message: object) -> str:
    return " ".join(str(message).split())
