"""Warehouses whose server is not here: compiled for their adapter, run on a library or by translation."""

from __future__ import annotations

import json
import re
from collections.abc import Iterable
from datetime import datetime
from functools import cached_property
from pathlib import Path
from typing import Any, ClassVar

import sqlglot
from harness import DuckDB, Engine, Rows
from sqlglot import ErrorLevel

DUMMIES: dict[str, dict[str, Any]] = {
    "snowflake": {
        "account": "none",
        "user": "none",
        "password": "none",
        "database": "db",
        "warehouse": "none",
    },
    "bigquery": {"method": "oauth-secrets", "token": "none", "project": "none"},
    "redshift": {"host": "none", "user": "none", "password": "none", "dbname": "db", "port": 5439},
    "databricks": {"host": "none", "http_path": "none", "token": "none", "catalog": "db"},
    "trino": {"method": "none", "user": "none", "host": "none", "port": 8080, "database": "db"},
    "athena": {"s3_staging_dir": "s3://none/", "region_name": "eu-west-1", "database": "db"},
    "clickhouse": {"host": "none", "user": "none", "password": "none"},
}


class Translated(DuckDB):
    """SQL compiled for one adapter, parsed strictly in its dialect, translated and run on DuckDB."""

    def __init__(self, name: str, scratch: Path) -> None:
        self.name = name
        self.keeps_milliseconds = name == "athena"
        super().__init__(scratch)

    def output(self) -> dict[str, Any]:
        return {"type": self.name, "schema": "spellcurve_tests", "threads": 1} | DUMMIES[self.name]

    def translate(self, sql: str) -> str:
        (statement,) = sqlglot.parse(sql, read=self.name, error_level=ErrorLevel.RAISE)
        return statement.sql(dialect="duckdb", unsupported_level=ErrorLevel.RAISE)

    def query(self, sql: str) -> Rows:
        return super().query(self.translate(sql))

    def make(self, table: str, call: str) -> None:
        self.execute(f'create or replace table "{table}" as {self.translate(self.render(call))}')


class ClickHouse(Engine):
    """SQL compiled for the adapter, run unchanged on the engine's own library."""

    name = "clickhouse"
    types: ClassVar[dict[str, str]] = {
        "bigint": "Nullable(Int64)",
        "double": "Nullable(Float64)",
        "text": "Nullable(String)",
        "date": "Nullable(Date32)",
        "moment": "Nullable(DateTime64(6))",
        "boolean": "Nullable(Bool)",
    }
    #: docs/warehouses.md asks users to put these into their profile's custom_settings.
    settings: ClassVar[dict[str, int]] = {
        "prefer_column_name_to_alias": 1,
        "cast_keep_nullable": 1,
        "join_use_nulls": 1,
    }

    def output(self) -> dict[str, Any]:
        return {"type": self.name, "schema": "spellcurve_tests", "threads": 1} | DUMMIES[self.name]

    @cached_property
    def session(self) -> Any:
        from chdb.session import Session

        session = Session(str(self.scratch / "clickhouse"))
        session.query("create database if not exists spellcurve_tests engine = Atomic")
        session.query("use spellcurve_tests")
        for setting, value in self.settings.items():
            session.query(f"set {setting} = {value}")
        session.query("set session_timezone = 'UTC'")
        return session

    def execute(self, sql: str, values: Any = ()) -> None:
        self.session.query(sql)

    def load(self, table: str, columns: dict[str, str], rows: Iterable[dict[str, Any]]) -> None:
        declared = ", ".join(f"{self.quote(name)} {self.types[kind]}" for name, kind in columns.items())
        self.execute(f"drop table if exists {self.quote(table)}")
        self.execute(f"create table {self.quote(table)} ({declared}) engine = MergeTree order by tuple()")
        lines = [json.dumps({name: row.get(name) for name in columns}, default=str) for row in rows]
        if lines:
            self.execute(f"insert into {self.quote(table)} format JSONEachRow " + "\n".join(lines))

    def make(self, table: str, call: str) -> None:
        self.execute(f"drop table if exists {self.quote(table)}")
        engine = "engine = MergeTree order by tuple()"
        self.execute(f"create table {self.quote(table)} {engine} as {self.render(call)}")

    def query(self, sql: str) -> Rows:
        """Rows with Python's own types, as chdb's Arrow output gives them."""
        rows = self.session.query(sql, "ArrowTable").to_pylist()
        return [{name: _as_elsewhere(value) for name, value in row.items()} for row in rows]

    def close(self) -> None:
        self.session.close()


def _as_elsewhere(value: Any) -> Any:
    """Take off what ClickHouse alone shows: the session's zone, and the last zeros of a second in a text."""
    if isinstance(value, datetime):
        return value.replace(tzinfo=None)
    if isinstance(value, str):
        return re.sub(r"(:[0-9]{2})(?:[.]0{6}|([.][0-9]*?[1-9])0*)(?![0-9])", r"\1\2", value)
    return value
