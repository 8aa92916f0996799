"""Builds the demo on a DuckDB file, checks its curves and read-outs and gathers what there is to tell."""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Callable, Collection, Iterator, Mapping, Sequence
from contextlib import AbstractContextManager, contextmanager, nullcontext
from dataclasses import dataclass
from datetime import date, timedelta
from pathlib import Path
from typing import Any

import duckdb
from dbt.cli.main import dbtRunner

from spellcurve import compare_ends, compare_groups, compare_readouts, generate
from spellcurve.compare import Comparison, compare_curves
from spellcurve.exact import CURVE_OPTIONS, CurveRow, Spell, as_spell, group_spells, survival_curves
from spellcurve.independent import independent_curves
from spellcurve.package import find_package
from spellcurve.provenance import Provenance, first_provenance
from spellcurve.summary import GroupFigures, average_within, share_at, time_to_half

DATABASE = "tool_library.duckdb"
SCHEMA = "harrow_lane"
GRACE_DAYS = 30

_MARK = "# Written by `spellcurve demo`; built again with every run."
Step = Callable[[str], AbstractContextManager[Any]]
Rows = list[dict[str, Any]]


class DemoError(Exception):
    """The demo cannot go on; the message is one sentence for the user."""


@dataclass(frozen=True)
class Reading:
    """A curve with the column that splits it, and the tables of its read-outs."""

    curve: str
    by: str | None
    shares: str
    quantiles: str
    means: str


@dataclass(frozen=True)
class Question:
    """One thing the summary tells: read-outs, their spells, durations to tell of, horizon of the average.

    `differ` asks whether its groups differ, which the table `tests` answers, if there is one.
    """

    title: str
    note: str
    unit: str
    survival_means: str
    half_means: str
    readings: tuple[Reading, ...]
    spells: str
    durations: tuple[int, ...]
    horizon: int
    differ: str = ""
    tests: str | None = None


QUESTIONS = (
    Question(
        "How long do members stay?",
        "A spell is a stretch of membership. A break of up to 30 days does not end it, so an end is only "
        "certain 30 days later. Those who joined before July 2020 are known from paper records, and "
        "count only from then on: nobody wrote down who had left before.",
        "days",
        "still members after",
        "half have left by day",
        (
            Reading(
                "demo_membership_survival",
                None,
                "demo_membership_shares",
                "demo_membership_quantiles",
                "demo_membership_means",
            ),
            Reading(
                "demo_membership_survival_by_plan",
                "plan",
                "demo_membership_shares_by_plan",
                "demo_membership_quantiles_by_plan",
                "demo_membership_means_by_plan",
            ),
        ),
        "demo_membership_spells",
        (30, 90, 365),
        365,
        "Do members of the two plans leave at different rates?",
        "demo_membership_log_rank",
    ),
    Question(
        "How soon do they borrow their first tool?",
        "A spell runs from joining to the first loan; who has not borrowed yet is still going.",
        "days",
        "nothing borrowed after",
        "half have borrowed by day",
        (
            Reading(
                "demo_first_loan_survival",
                "plan",
                "demo_first_loan_shares",
                "demo_first_loan_quantiles",
                "demo_first_loan_means",
            ),
        ),
        "demo_first_loan_spells",
        (7, 30, 365),
        365,
    ),
    Question(
        "How long do parts of the workshop's machines last?",
        "A spell is the life of a part, in hours of running.",
        "hours",
        "not worn out after",
        "half are worn out by hour",
        (
            Reading(
                "demo_part_survival", "part", "demo_part_shares", "demo_part_quantiles", "demo_part_means"
            ),
        ),
        "demo_part_spells",
        (100, 500, 1_000),
        1_000,
        "Do parts wear out at different rates?",
        "demo_part_log_rank",
    ),
)

#: Durations in days that are told of causes, of loans and of states.
LEFT_BY = 365
LOANS_AT = (30, 90, 365, 730)
STATES_AT = (30, 90, 365, 730)
STATES = ("active", "paused", "lapsed")

#: Every spell table of the demo, and the tables whose rows it accounts for.
SOURCES: dict[str, tuple[str, ...]] = {
    "demo_membership_spells": ("demo_memberships",),
    "demo_desk_spells": ("demo_desk_log",),
    "demo_status_spells": ("demo_status_changes",),
    "demo_roll_spells": ("demo_sunday_roll",),
    "demo_borrowing_spells": ("demo_joiner_loans",),
    "demo_first_loan_spells": ("demo_joiners", "demo_joiner_loans"),
    "demo_part_spells": ("demo_machine_parts",),
}


@dataclass(frozen=True)
class Answer:
    """A question, the figures of its groups, everybody first, and rows of their test, all groups first."""

    question: Question
    groups: tuple[GroupFigures, ...]
    tests: tuple[dict[str, Any], ...] = ()


@dataclass(frozen=True)
class Ends:
    """Rows of the tables of causes, loans and states, as the summary tells of them.

    Attributes:
        leaving: the shares that have left by `LEFT_BY`, by cause and plan.
        staying: the share still members then, by plan.
        tests: Gray's test between plans, by cause.
        loans: mean counts of loans, by plan and duration.
        loan_differences: how they differ between plans at `LOANS_AT`.
        states: shares of states, by plan and duration.
    """

    leaving: Rows
    staying: Rows
    tests: Rows
    loans: Rows
    loan_differences: Rows
    states: Rows


@dataclass(frozen=True)
class Refusals:
    """Rows that a spell table could not use: rows read in all, and counts by fault code."""

    spells: str
    sources: tuple[str, ...]
    rows: int
    faults: dict[str, int]

    @property
    def refused(self) -> int:
        """Rows refused in all."""
        return sum(self.faults.values())


@dataclass(frozen=True)
class CheckedCurve:
    """A curve table compared with exact fractions, and, group by group, with lifelines."""

    model: str
    exact: Comparison
    independent: tuple[Comparison, ...]

    @property
    def comparisons(self) -> tuple[Comparison, ...]:
        """All comparisons, that with exact fractions first."""
        return (self.exact, *self.independent)

    @property
    def wrong(self) -> list[str]:
        """A sentence about every figure that is wrong, once even where both ways say so."""
        sentences: dict[tuple[Any, ...], str] = {}
        for comparison in self.comparisons:
            for one in comparison.disagreements:
                place = (one.kind, one.group, one.duration, one.column)
                sentences.setdefault(place, one.sentence)
        return list(sentences.values())


@dataclass(frozen=True)
class CheckedReadout:
    """A read-out's table compared with exact fractions."""

    model: str
    exact: Comparison

    @property
    def comparisons(self) -> tuple[Comparison, ...]:
        """The one comparison."""
        return (self.exact,)

    @property
    def wrong(self) -> list[str]:
        """A sentence about every figure that is wrong."""
        return [one.sentence for one in self.exact.disagreements]


@dataclass(frozen=True)
class DemoResult:
    """Everything the demo found."""

    database: Path
    schema: str
    as_of: date
    known_until: date
    members: int
    still_members: int
    answers: tuple[Answer, ...]
    ends: Ends
    refusals: tuple[Refusals, ...]
    checked: tuple[CheckedCurve, ...]
    readouts: tuple[CheckedReadout, ...]
    checked_ends: tuple[CheckedReadout, ...]
    tests_run: int
    tests_failed: tuple[str, ...]
    records: tuple[str, ...] = generate.TABLES

    @property
    def tables(self) -> tuple[CheckedCurve | CheckedReadout, ...]:
        """All tables that were compared, curves first."""
        return (*self.checked, *self.readouts, *self.checked_ends)

    @property
    def disagreements(self) -> dict[str, list[str]]:
        """A sentence about every figure that is wrong, by table; tables without any are left out."""
        return {table.model: table.wrong for table in self.tables if table.wrong}

    @property
    def largest_difference(self) -> float:
        """Largest relative difference of any figure from what it should be."""
        return max(one.largest_difference for table in self.tables for one in table.comparisons)

    @property
    def agrees(self) -> bool:
        """Whether every figure agrees and every test passed."""
        return not self.tests_failed and not self.disagreements


def run_demo(
    folder: Path,
    members: int = generate.DEFAULT_MEMBERS,
    seed: int = generate.DEFAULT_SEED,
    check_only: bool = False,
    step: Step = lambda doing: nullcontext(),
) -> DemoResult:
    """Builds the demo in a folder, checks it and gathers the figures.

    Args:
        folder: where everything is written; made if it is not there.
        members: size of the library.
        seed: of the random records.
        check_only: look at what an earlier run left in the folder instead of building it.
        step: is called with what is being done, and gives a context manager to do it in.

    Raises:
        DemoError: the demo cannot be built or read.
    """
    demo = _Demo(folder.expanduser().resolve())
    if check_only:
        demo.check_is_there()
    else:
        with step(f"Writing the records of {members:,} members"):
            demo.prepare()
            demo.write_records(members, seed)
        with step("Building spells, curves and read-outs with dbt"):
            demo.dbt("run", "--select", "path:models/demo")
    with step("Running the package's tests with dbt"):
        tests = demo.dbt("test", "--select", "path:models/demo")
    with step("Recomputing every curve with lifelines and in exact fractions"):
        checked = demo.check_curves()
    with step("Recomputing what is read off them in exact fractions"):
        readouts = demo.check_readouts()
    with step("Recomputing causes, counts and states in exact fractions"):
        ends = demo.check_ends()
    with step("Gathering the figures"):
        return demo.result(checked, readouts, ends, tests)


@contextmanager
def _own_settings_only() -> Iterator[None]:
    """Keeps the user's settings of dbt (environment variables such as DBT_WARN_ERROR) out of the demo."""
    kept = {name: os.environ.pop(name) for name in list(os.environ) if name.startswith("DBT_")}
    try:
        yield
    finally:
        os.environ.update(kept)


class _Demo:
    """The demo in one folder."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.database = folder / DATABASE
        self.compiled = folder / "target" / "compiled" / "spellcurve" / "models" / "demo"
        try:
            self.project = find_package()
        except FileNotFoundError as error:
            raise DemoError(str(error)) from error
        self.exact_curves: dict[str, dict[tuple[Any, ...], list[CurveRow]]] = {}

    def prepare(self) -> None:
        """Makes the folder and its profile, and removes the database of an earlier run."""
        profile = self.folder / "profiles.yml"
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            if profile.exists() and not profile.read_text(encoding="utf-8").startswith(_MARK):
                raise DemoError(f"{profile} is not the demo's own; give another folder with --folder.")
            if self.database.exists() and not profile.exists():
                raise DemoError(f"{self.database} is not the demo's own; give another folder with --folder.")
            self._write_profile()
            for leftover in (self.database, self.database.with_suffix(".duckdb.wal")):
                leftover.unlink(missing_ok=True)
            shutil.rmtree(self.compiled, ignore_errors=True)
        except (OSError, UnicodeDecodeError) as error:
            reason = getattr(error, "strerror", None) or str(error)
            raise DemoError(
                f"The folder {self.folder} cannot be used ({reason}); give another one with --folder."
            ) from error

    def _write_profile(self) -> None:
        output = {
            "type": "duckdb",
            "path": str(self.database),
            "schema": SCHEMA,
            "threads": 2,
            "settings": {"enable_progress_bar": False},
        }
        profile = {"spellcurve": {"target": "demo", "outputs": {"demo": output}}}
        text = f"{_MARK}\n{json.dumps(profile, indent=2)}\n"
        (self.folder / "profiles.yml").write_text(text, encoding="utf-8")

    def check_is_there(self) -> None:
        """Raises DemoError if no earlier run left its tables and its compiled SQL here."""
        if not (self.database.is_file() and self._compiled_curves()):
            raise DemoError(f"There is no finished demo in {self.folder}; run it without --check-only first.")
        self._write_profile()  # the folder may have been moved

    def write_records(self, members: int, seed: int) -> None:
        """Fills the source tables: the committed seeds by dbt, or any other library by the generator.

        Both write tables of the same names and types, so that the models need not know.
        """
        if (members, seed) == (generate.DEFAULT_MEMBERS, generate.DEFAULT_SEED):
            self.dbt("seed", "--select", "path:seeds/demo")
            return
        with self._connect() as connection:
            try:
                generate.write_tables(connection, SCHEMA, members, seed)
            except ValueError as error:
                raise DemoError(str(error)) from error

    def dbt(self, command: str, *arguments: str) -> Sequence[Any]:
        """Runs dbt on the package's project and gives its results, node by node.

        Raises:
            DemoError: dbt could not do it. Tests that fail are results, not errors.
        """
        with _own_settings_only():
            done = dbtRunner().invoke(
                [
                    "--log-level", "none",
                    "--log-level-file", "debug",
                    "--no-send-anonymous-usage-stats",
                    "--no-use-colors",
                    "--no-use-colors-file",
                    command,
                    *arguments,
                    "--project-dir", str(self.project),
                    "--profiles-dir", str(self.folder),
                    "--profile", "spellcurve",
                    "--target", "demo",
                    "--target-path", str(self.folder / "target"),
                    "--log-path", str(self.folder / "logs"),
                    "--vars", json.dumps({"spellcurve_demo": True}),
                ]
            )  # fmt: skip
        results: Sequence[Any] = getattr(done.result, "results", None) or []
        broken = [result for result in results if result.status not in ("success", "pass", "fail", "warn")]
        if done.exception is not None or broken or not results:
            raise DemoError(self._what_dbt_says(command, done.exception, broken))
        return results

    def _what_dbt_says(self, command: str, exception: BaseException | None, broken: Sequence[Any]) -> str:
        where = f"; the whole log is {self.folder / 'logs' / 'dbt.log'}."
        failed = [result for result in broken if result.status != "skipped"]
        if failed:
            message = " ".join(str(failed[0].message).split())
            return f"dbt {command} failed at {failed[0].node.name} ({message}){where}"
        said = "nothing was selected" if exception is None else " ".join(str(exception).split())
        return f"dbt {command} could not run ({said}){where}"

    def _connect(self) -> duckdb.DuckDBPyConnection:
        try:
            connection = duckdb.connect(str(self.database))
            connection.execute("set enable_progress_bar = false")
            return connection
        except duckdb.Error as error:
            raise DemoError(
                f"{self.database} cannot be opened; close the program that has it open, or give another "
                f"folder with --folder ({' '.join(str(error).split())})."
            ) from error

    def _compiled_curves(self) -> dict[str, Provenance]:
        """Every compiled model that is a survival curve, by name."""
        return self._compiled_calls(("survival_curve",))

    def _compiled_calls(self, macros: Collection[str]) -> dict[str, Provenance]:
        """Every compiled model that is a call of one of these macros, by name."""
        calls = {}
        for path in sorted(self.compiled.glob("*/demo_*.sql")):
            provenance = first_provenance(path.read_text(encoding="utf-8"), where=path.stem)
            if provenance is not None and provenance.macro in macros:
                calls[path.stem] = provenance
        return calls

    def check_curves(self) -> tuple[CheckedCurve, ...]:
        """Recomputes every curve from its spells, as aggregated by the database, and compares all figures."""
        checked = []
        with self._connect() as connection:
            for model, provenance in self._compiled_curves().items():
                options = {
                    name: provenance.options[name] for name in CURVE_OPTIONS if name in provenance.options
                }
                spells = _spells(connection, provenance)
                self.exact_curves[model] = survival_curves(spells, **options)
                checked.append(
                    _check_curve(connection, model, provenance, spells, self.exact_curves[model], options)
                )
        return tuple(checked)

    def check_readouts(self) -> tuple[CheckedReadout, ...]:
        """Recomputes the read-outs from the exact curves that `check_curves` left, or from spells."""
        with self._connect() as connection:
            return tuple(
                _check_readout(connection, model, provenance, self.exact_curves)
                for model, provenance in self._compiled_calls(
                    (*compare_readouts.KEYS, *compare_groups.OF_CURVES, "log_rank_test")
                ).items()
            )

    def check_ends(self) -> tuple[CheckedReadout, ...]:
        """Recomputes the tables of causes, recurrent events and states from what their macros read."""
        calls = {
            model: provenance
            for model, provenance in self._compiled_calls(compare_ends.KEYS).items()
            if provenance.options.get("rows", "sound") == "sound"
        }
        with self._connect() as connection:
            recomputed = compare_ends.Recomputed(
                lambda relation, select: _rows(connection, select.replace("{source}", relation)),
                made_by=lambda relation: calls.get(_bare(relation)),
            )
            return tuple(
                CheckedReadout(
                    model,
                    compare_readouts.compare_readouts(
                        _rows(connection, f"select * from {_table(model)}"),
                        recomputed.table(provenance),
                        compare_ends.names(provenance),
                        differences=compare_ends.DIFFERENCES,
                    ),
                )
                for model, provenance in calls.items()
            )

    def result(
        self,
        checked: tuple[CheckedCurve, ...],
        readouts: tuple[CheckedReadout, ...],
        ends: tuple[CheckedReadout, ...],
        tests: Sequence[Any],
    ) -> DemoResult:
        """Gathers the figures from the tables."""
        with self._connect() as connection:
            return DemoResult(
                database=self.database,
                schema=SCHEMA,
                as_of=generate.AS_OF,
                known_until=generate.AS_OF - timedelta(days=GRACE_DAYS),
                members=_count(connection, "demo_members", "joined_on is not null"),
                still_members=_count(connection, "demo_membership_spells", "event = 0"),
                answers=tuple(_answer(connection, question) for question in QUESTIONS),
                ends=_ends(connection),
                refusals=tuple(_refusals(connection, *known) for known in SOURCES.items()),
                checked=checked,
                readouts=readouts,
                checked_ends=ends,
                tests_run=len(tests),
                tests_failed=tuple(one.node.name for one in tests if one.status not in ("pass", "warn")),
            )


def _table(name: str) -> str:
    return f'"{SCHEMA}"."{name}"'


def _bare(relation: str) -> str:
    return relation.rsplit(".", 1)[-1].strip('"')


def _quoted(names: Sequence[str]) -> list[str]:
    return ['"' + name.replace('"', '""') + '"' for name in names]


def _rows(connection: duckdb.DuckDBPyConnection, sql: str) -> Rows:
    try:
        found = connection.execute(sql)
    except duckdb.Error as error:
        reason = " ".join(str(error).split())
        raise DemoError(f"The demo's tables cannot be read ({reason}); build the demo again.") from error
    names = [column[0] for column in found.description or []]
    return [dict(zip(names, row, strict=True)) for row in found.fetchall()]


def _count(connection: duckdb.DuckDBPyConnection, table: str, where: str = "true") -> int:
    rows = _rows(connection, f"select count(*) as counted from {_table(table)} where {where}")
    return int(rows[0]["counted"])


def _spells(
    connection: duckdb.DuckDBPyConnection, provenance: Provenance
) -> dict[tuple[Any, ...], list[Spell]]:
    """The spells that a model reads, as aggregated by the database; a cohort comes first in its groups."""
    by = compare_groups.columns(provenance)
    expressions = _quoted(by)
    if cohort := provenance.options.get("cohort"):
        period, column = provenance.options["period"], _quoted([cohort])[0]
        by = ("cohort", *by)
        expressions.insert(
            0,
            f"cast(date_trunc('{period}', {column}) as date) as cohort" if period else f"{column} as cohort",
        )
    columns = ", ".join([*expressions, "entry", "duration", "event"])
    rows = _rows(connection, f"select {columns}, sum(weight) as weight from {provenance.spells} group by all")
    return group_spells(as_spell(row, _group(row, by)) for row in rows)


def _check_curve(
    connection: duckdb.DuckDBPyConnection,
    model: str,
    provenance: Provenance,
    spells: Mapping[tuple[Any, ...], list[Spell]],
    expected: Mapping[tuple[Any, ...], Sequence[CurveRow]],
    options: Mapping[str, Any],
) -> CheckedCurve:
    by = provenance.by
    published = _rows(connection, f"select * from {_table(model)}")
    exact = compare_curves(published, expected, by)
    return CheckedCurve(model, exact, _compare_with_lifelines(published, spells, by, options))


def _check_readout(
    connection: duckdb.DuckDBPyConnection,
    model: str,
    provenance: Provenance,
    curves: Mapping[str, Mapping[tuple[Any, ...], Sequence[CurveRow]]],
) -> CheckedReadout:
    macro, options, by = provenance.macro, provenance.options, provenance.by
    published = _rows(connection, f"select * from {_table(model)}")
    if macro in compare_groups.KEYS:
        if macro in compare_groups.OF_CURVES:
            expected = compare_groups.of_curves(provenance, curves[_bare(options["curve"])], str)
        else:
            every = [spell for own in _spells(connection, provenance).values() for spell in own]
            expected = compare_groups.of_spells(provenance, every, str)
        names = (*by, *compare_groups.KEYS[macro])
        return CheckedReadout(
            model,
            compare_readouts.compare_readouts(
                published, expected, names, differences=compare_groups.DIFFERENCES
            ),
        )
    if macro in compare_readouts.OF_CURVES:
        expected = compare_readouts.of_curves(macro, curves[_bare(options["curve"])], options)
    else:
        expected = compare_readouts.of_spells(macro, _spells(connection, provenance), options)
        by = ("cohort", *by) if macro == "cohort_readout" else by
    names = (*by, *compare_readouts.KEYS[macro])
    return CheckedReadout(model, compare_readouts.compare_readouts(published, expected, names))


def _group(row: Mapping[str, Any], by: Sequence[str]) -> tuple[Any, ...]:
    return tuple(row[name] for name in by)


def _compare_with_lifelines(
    published: Rows,
    spells: Mapping[tuple[Any, ...], list[Spell]],
    by: Sequence[str],
    options: Mapping[str, Any],
) -> tuple[Comparison, ...]:
    """Group by group, since lifelines may vouch for other columns in each."""
    rows_of: dict[tuple[Any, ...], Rows] = {}
    for row in published:
        rows_of.setdefault(_group(row, by), []).append(row)
    return tuple(
        compare_curves(rows_of.get(group, []), {group: curve.rows}, by, columns=curve.columns)
        for group, curve in independent_curves(spells, **options).items()
    )


def _answer(connection: duckdb.DuckDBPyConnection, question: Question) -> Answer:
    groups = []
    for reading in question.readings:
        label = f'"{reading.by}"' if reading.by else "'everybody'"
        counted = _rows(
            connection,
            f"select {label} as label, count(*) as spells, sum(1 - event) as still_open "
            f"from {_table(question.spells)} group by 1 order by 1",
        )
        ends = _rows(
            connection,
            f"select {label} as label, max(duration) as last from {_table(reading.curve)} group by 1",
        )
        follow_up = {row["label"]: row["last"] for row in ends}
        shares, quantiles, means = (
            _rows(connection, f"select {label} as label, * from {_table(name)}")
            for name in (reading.shares, reading.quantiles, reading.means)
        )
        for group in counted:
            own = group["label"]
            groups.append(
                GroupFigures(
                    str(own),
                    group["spells"],
                    int(group["still_open"]),
                    int(follow_up.get(own, 0)),
                    time_to_half(_of(own, quantiles)),
                    tuple(share_at(_of(own, shares), duration) for duration in question.durations),
                    average_within(_of(own, means), question.horizon),
                )
            )
    tests = (
        _rows(connection, f"select * from {_table(question.tests)} order by group_a nulls first, group_b")
        if question.tests
        else []
    )
    return Answer(question, tuple(groups), tuple(tests))


def _ends(connection: duckdb.DuckDBPyConnection) -> Ends:
    def table(name: str, where: str = "true") -> Rows:
        return _rows(connection, f"select * from {_table(name)} where {where} order by all")

    return Ends(
        leaving=table("demo_lapse_causes_shares", f"duration = {LEFT_BY}"),
        staying=table("demo_membership_shares_by_plan", f"duration = {LEFT_BY}"),
        tests=table("demo_lapse_causes_gray"),
        loans=table("demo_loan_counts"),
        loan_differences=table("demo_loan_count_differences"),
        states=table("demo_membership_states"),
    )


def _of(label: Any, rows: Rows) -> Rows:
    return [row for row in rows if row["label"] == label]


def _refusals(connection: duckdb.DuckDBPyConnection, spells: str, sources: tuple[str, ...]) -> Refusals:
    rows = sum(_count(connection, name) for name in sources)
    faults = _rows(
        connection, f"select fault, count(*) as refused from {_table(spells + '_faulty')} group by fault"
    )
    return Refusals(spells, sources, rows, {row["fault"]: row["refused"] for row in faults})
