"""Runs the package's macros on a real engine: dbt compiles the call, the engine executes the SQL."""

from __future__ import annotations

import os
from collections.abc import Iterable, Sequence
from contextlib import redirect_stdout
from functools import cached_property
from io import StringIO
from itertools import chain
from pathlib import Path
from typing import Any

import duckdb
from dbt.cli.main import dbtRunner

ROOT = Path(__file__).resolve().parent.parent
os.environ["DBT_SEND_ANONYMOUS_USAGE_STATS"] = "false"
PROFILE = """\
spellcurve:
  target: duckdb
  outputs:
    duckdb: {type: duckdb, path: ':memory:', threads: 1}
"""
SEPARATOR = "/* ---- next call ---- */"
TYPES = {
    "bigint": "bigint",
    "double": "double",
    "text": "varchar",
    "date": "date",
    "moment": "timestamp",
    "boolean": "boolean",
}


class CompilationError(Exception):
    """dbt refused to compile; the text is dbt's own."""


class Engine:
    """A warehouse under test. `render` compiles macro calls, `load` makes a table, `query` gives rows as dicts."""

    name = "duckdb"

    def __init__(self, scratch: Path) -> None:
        self.scratch = scratch
        (scratch / "profiles.yml").write_text(PROFILE)
        self._rendered: dict[str, str] = {}

    @cached_property
    def connection(self) -> duckdb.DuckDBPyConnection:
        return duckdb.connect()

    def render(self, call: str) -> str:
        """The SQL of one macro call, e.g. "survival_curve('spells', by=['plan'])"."""
        return self.render_all([call])[0]

    def render_all(self, calls: Sequence[str]) -> list[str]:
        """As render, for many calls at the cost of one dbt run."""
        missing = [call for call in dict.fromkeys(calls) if call not in self._rendered]
        if missing:
            inline = SEPARATOR.join("{{ spellcurve." + call + " }}" for call in missing)
            for call, sql in zip(missing, self._compile(inline).split(SEPARATOR), strict=True):
                self._rendered[call] = sql.strip()
        return [self._rendered[call] for call in calls]

    def _compile(self, inline: str) -> str:
        places = {"--profiles-dir": self.scratch, "--target-path": self.scratch / "target", "--log-path": self.scratch / "logs"}
        arguments = ["compile", "--quiet", "--project-dir", str(ROOT), "--target", self.name, "--inline", inline]
        for option, place in places.items():
            arguments += [option, str(place)]
        said: list[str] = []
        with redirect_stdout(StringIO()):
            outcome = dbtRunner(callbacks=[lambda event: said.append(event.info.msg)]).invoke(arguments)
        if not outcome.success:
            raise CompilationError("\n".join([str(outcome.exception), *said]))
        return outcome.result.results[0].node.compiled_code

    def load(self, table: str, columns: dict[str, str], rows: Iterable[dict[str, Any]]) -> None:
        """Makes `table` anew; column types are those of TYPES."""
        declared = ", ".join(f'"{name}" {TYPES[kind]}' for name, kind in columns.items())
        self.connection.execute(f'create or replace table "{table}" ({declared})')
        values = [[row.get(name) for name in columns] for row in rows]
        if values:
            marks = ", ".join(["(" + ", ".join("?" for _ in columns) + ")"] * len(values))
            self.connection.execute(f'insert into "{table}" values {marks}', list(chain.from_iterable(values)))

    def query(self, sql: str) -> list[dict[str, Any]]:
        cursor = self.connection.execute(sql)
        names = [column[0] for column in cursor.description]
        return [dict(zip(names, values, strict=True)) for values in cursor.fetchall()]

    def run(self, call: str) -> list[dict[str, Any]]:
        return self.query(self.render(call))

    def make(self, table: str, call: str) -> None:
        """Makes `table` anew from the rows of a macro call, as a model would."""
        self.connection.execute(f'create or replace table "{table}" as {self.render(call)}')
