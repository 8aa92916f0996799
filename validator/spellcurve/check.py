"""Recomputes what the models of a dbt project publish, and says which figures, rows or statuses are wrong.

Of a curve, a test or a read-out only spells that the warehouse has added up come over the wire, never the
spells themselves; of a spell table, the rows of some subjects.
"""

from __future__ import annotations

import tempfile
import time
from collections.abc import Callable, Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from decimal import Context, localcontext
from fractions import Fraction
from pathlib import Path
from typing import Any

from spellcurve import compare_ends, compare_groups, compare_readouts, exact, exact_readouts, rebuild
from spellcurve.compare import TOLERANCE, Comparison, compare_curves
from spellcurve.compare_spells import as_moment, compare_rows, local
from spellcurve.exact import BOUNDS, CURVE_OPTIONS, FIGURES, CurveRow, Spell
from spellcurve.independent import independent_curves
from spellcurve.project import Call, Model, Project, ProjectError, Rows, WarehouseError
from spellcurve.provenance import Provenance

AGREES, DISAGREES, STALE, UNCHECKED = "agrees", "disagrees", "stale", "not checked"
SAMPLE = 200
#: Rows of a table without subjects, or without a subject in them, that are still pulled.
MOST_ROWS = 50_000
#: Critical values of simultaneous bands are found by iteration, to about this relative accuracy.
BAND_TOLERANCE = 1e-7

Group = tuple[Any, ...]
Curves = Mapping[Group, Sequence[CurveRow]]
Announce = Callable[[str, int, int], None]


class CheckError(Exception):
    """The project cannot be checked; the message is one sentence for the user."""


class NotChecked(Exception):
    """This call cannot be recomputed; the message is one sentence."""


@dataclass(frozen=True)
class CheckedCall:
    """What was found about one call of a macro in a model.

    Attributes:
        model: name of the model.
        path: of its file.
        macro: the macro that it calls.
        verdict: ``agrees``, ``disagrees``, ``stale`` (the model's SQL gives the right rows, its table holds
            older ones) or ``not checked``.
        comparisons: with exact arithmetic first, then with independent estimators; none if not checked.
        note: one sentence on how it was checked, or why it was not; empty if there is nothing to say.
        seconds: how long it took.
    """

    model: str
    path: str
    macro: str
    verdict: str
    comparisons: tuple[Comparison, ...] = ()
    note: str = ""
    seconds: float = 0.0

    @property
    def rows(self) -> int:
        """Rows that the model published, as far as they were pulled."""
        return max((one.rows for one in self.comparisons), default=0)

    @property
    def figures(self) -> int:
        """Figures compared, once for each way of recomputing them."""
        return sum(one.figures for one in self.comparisons)

    @property
    def largest_difference(self) -> float:
        """Largest relative difference of a figure."""
        return max((one.largest_difference for one in self.comparisons), default=0.0)

    @property
    def sentences(self) -> list[str]:
        """A sentence on everything that is wrong, once even where several ways of recomputing say so."""
        found: dict[tuple[Any, ...], str] = {}
        for comparison in self.comparisons:
            for one in comparison.disagreements:
                place = (
                    one.kind,
                    one.group,
                    one.duration,
                    one.column,
                    one.sentence if one.column is None else "",
                )
                found.setdefault(place, one.sentence)
        return list(found.values())


@dataclass(frozen=True)
class CheckResult:
    """What was found about a project.

    Attributes:
        project: folder of the project.
        adapter: type of dbt's adapter, for instance duckdb.
        calls: every call in every selected model, in the order of dbt's graph.
    """

    project: Path
    adapter: str
    calls: tuple[CheckedCall, ...] = field(default=())

    @property
    def agrees(self) -> bool:
        """Whether every call was checked and agrees."""
        return bool(self.calls) and all(call.verdict == AGREES for call in self.calls)

    @property
    def exit_status(self) -> int:
        """0 if all agree, 1 if any figure is wrong or stale, 2 if something could not be checked."""
        verdicts = {call.verdict for call in self.calls}
        if verdicts & {DISAGREES, STALE}:
            return 1
        return 2 if UNCHECKED in verdicts or not verdicts else 0


def check_project(
    project_dir: str | Path = ".",
    *,
    select: Sequence[str] = (),
    exclude: Sequence[str] = (),
    profiles_dir: str | Path | None = None,
    profile: str | None = None,
    target: str | None = None,
    variables: Mapping[str, Any] | None = None,
    tolerance: float = TOLERANCE,
    sample: int = SAMPLE,
    announce: Announce = lambda doing, done, of: None,
) -> CheckResult:
    """Recompute every model of a dbt project that calls a Spellcurve macro, and compare.

    The project's own dbt, profile and adapter are used. Nothing is written to the warehouse.

    Args:
        project_dir: folder of dbt_project.yml.
        select: selections of models, as dbt takes them; none means all.
        exclude: selections of models to leave out.
        profiles_dir: folder of profiles.yml; None leaves the choice to dbt.
        profile: as for dbt.
        target: as for dbt.
        variables: as for ``dbt --vars``.
        tolerance: largest relative difference that still counts as agreement.
        sample: how many subjects of a spell table are rebuilt, 1 or more.
        announce: is called with what is being done, how many models are done, and how many there are (0 while
            that is not known).

    Returns:
        what was found, one entry for each call; none if no selected model calls the package.

    Raises:
        CheckError: the project or the warehouse cannot be read.
        ValueError: tolerance or sample is out of range.
    """
    if not 0 <= tolerance < 1:
        raise ValueError(f"tolerance is {tolerance!r}; give a number from 0 to below 1, for instance 1e-9.")
    if sample < 1:
        raise ValueError(f"sample is {sample!r}; give a whole number of subjects, 1 or more.")
    with tempfile.TemporaryDirectory(prefix="spellcurve-") as scratch:
        try:
            project = Project(
                Path(project_dir),
                Path(scratch),
                Path(profiles_dir).expanduser().resolve() if profiles_dir else None,
                profile,
                target,
                variables,
            )
            announce("Compiling the models with dbt", 0, 0)
            models = project.models(select, exclude)
            checked = list(_check_models(project, models, tolerance, sample, announce))
            return CheckResult(project.folder, project.adapter, tuple(checked))
        except ProjectError as error:
            raise CheckError(str(error)) from error


def _check_models(
    project: Project, models: Sequence[Model], tolerance: float, sample: int, announce: Announce
) -> Iterator[CheckedCall]:
    if not models:
        return
    with project.connection():
        checker = _Checker(project, tolerance, sample)
        for place, model in enumerate(models):
            announce(model.name, place, len(models))
            yield from checker.check(model)
    announce("", len(models), len(models))


@dataclass(frozen=True)
class Expected:
    """What a call should give.

    Attributes:
        compare: takes the published rows and gives comparisons, that with exact arithmetic first.
        where: which of the published rows to pull, as SQL; empty for all.
        note: one sentence on how far this goes.
        dated: gives a sentence on another date in published rows than in the expected, or an empty one.
    """

    compare: Callable[[Rows], tuple[Comparison, ...]]
    where: str = ""
    note: str = ""
    dated: Callable[[Rows], str] = lambda rows: ""


class _Checker:
    """Checks the calls of one project; keeps curves that it has recomputed, for their read-outs."""

    def __init__(self, project: Project, tolerance: float, sample: int) -> None:
        self.project = project
        self.tolerance = tolerance
        self.sample = sample
        self.computed: dict[int, Curves] = {}  # by identity of the call
        self.as_published = False  # whether to recompute read-outs from tables as they are, right or wrong

    def check(self, model: Model) -> Iterator[CheckedCall]:
        if not model.calls:
            sentence = "No provenance line is in its compiled SQL; compile it with an unchanged package."
            yield CheckedCall(model.name, model.path, "?", UNCHECKED, note=sentence)
        for call in model.calls:
            started = time.monotonic()
            try:
                checked = self._check_call(model, call)
            except (NotChecked, ProjectError) as error:
                reason = str(error)
                checked = CheckedCall(model.name, model.path, call.provenance.macro, UNCHECKED, note=reason)
            yield replace(checked, seconds=time.monotonic() - started)

    def _check_call(self, model: Model, call: Call) -> CheckedCall:
        from spellcurve import __version__

        macro, version = call.provenance.macro, call.provenance.version
        if version != __version__:
            raise NotChecked(
                f"Version {version} of the package wrote its SQL, but the validator is {__version__}; "
                "install both in one version."
            )
        if not call.sql:
            raise NotChecked(
                f"The call of {macro} stands beside others, in no parentheses; give each a CTE of its own."
            )
        expected = self.expected(call)
        stored = call.whole and model.relation is not None
        if stored:
            try:
                rows = self.project.query(f"select * from {model.relation}{expected.where}")
            except WarehouseError as error:
                raise NotChecked(
                    f"{model.relation} cannot be read; build the model with dbt first ({error})."
                ) from error
        else:
            rows = self._computed(call, expected)
        comparisons = expected.compare(rows)
        notes = [expected.note]
        if not call.whole:
            notes.append(
                "The call is part of a larger model: what the call gives was checked, not the table."
            )
        verdict = AGREES if all(one.agrees for one in comparisons) else DISAGREES
        if verdict == DISAGREES and stored:
            if self._is_stale(call, expected):
                verdict = STALE
                notes.append(
                    "The model's SQL gives the right rows now, its table holds others: it was built before "
                    "what it reads changed or with other options, or was changed since; build it again."
                    f"{expected.dated(rows)}"
                )
            elif stale := self._stale_source(call, rows):
                verdict = STALE
                notes.append(f"It is right for {stale} as that stands, which is stale; build both again.")
        note = " ".join(one for one in notes if one)
        return CheckedCall(model.name, model.path, macro, verdict, comparisons, note)

    def _computed(self, call: Call, expected: Expected) -> Rows:
        return self.project.query(f"select * from (\n{call.sql}\n) spellcurve_checked{expected.where}")

    def _is_stale(self, call: Call, expected: Expected) -> bool:
        try:
            return all(one.agrees for one in expected.compare(self._computed(call, expected)))
        except ProjectError:
            return False

    def _stale_source(self, call: Call, rows: Rows) -> str:
        """The model that a read-out reads, if that is stale and these rows are right for its table."""
        options = call.provenance.options
        relation = next((options[name] for name in ("curve", "incidence", "counts") if name in options), None)
        if relation is None or self._making(call, relation) is None:
            return ""
        read = self.project.made_by(relation)
        if read is None:
            return ""
        self.as_published = True
        try:
            agrees = all(one.agrees for one in self.expected(call).compare(rows))
        except (NotChecked, ProjectError):
            agrees = False
        finally:
            self.as_published = False
        try:
            stale = agrees and self._check_call(read, read.calls[0]).verdict == STALE
        except (NotChecked, ProjectError):
            stale = False
        return read.name if stale else ""

    # What a call should give

    def expected(self, call: Call) -> Expected:
        """What a call should give.

        Raises:
            NotChecked: there is no telling.
        """
        macro = call.provenance.macro
        try:
            if macro == "survival_curve":
                return self._of_curve(call)
            if macro in compare_readouts.OF_CURVES:
                return self._of_readout(call)
            if macro in compare_readouts.KEYS:
                return self._of_spells(call)
            if macro in BUILDERS:
                return self._of_builder(call)
            if macro in compare_ends.KEYS:
                return self._of_ends(call)
            if macro in compare_groups.KEYS:
                return self._of_groups(call)
        except ValueError as error:  # spells that are no spells
            raise NotChecked(f"What the model reads is not sound: {error}") from error
        raise NotChecked(f"The validator has no way to recompute {macro}.")

    def _of_curve(self, call: Call) -> Expected:
        by = bare(call.provenance.by)
        spells = self.spells(call)
        options = _given(call, CURVE_OPTIONS)
        curves = self._exact_curves(call, spells)
        independent = independent_curves(spells, **options)
        has_bands = bool(call.provenance.options.get("simultaneous"))

        def compare(rows: Rows) -> tuple[Comparison, ...]:
            pointwise: tuple[str, ...] = FIGURES
            if has_bands:
                pointwise = tuple(name for name in FIGURES if name not in BOUNDS)
            found = [compare_curves(rows, curves, by, self.tolerance, pointwise)]
            if has_bands:
                found.append(compare_curves(rows, curves, by, max(self.tolerance, BAND_TOLERANCE), BOUNDS))
            rows_of: dict[Group, Rows] = {}
            for row in rows:
                if all(name in row for name in by):
                    rows_of.setdefault(tuple(row[name] for name in by), []).append(row)
            for group, curve in independent.items():
                columns = tuple(name for name in curve.columns if name in pointwise)
                published = rows_of.get(group, [])
                found.append(compare_curves(published, {group: curve.rows}, by, self.tolerance, columns))
            return tuple(found)

        return Expected(compare)

    def _exact_curves(self, call: Call, spells: Mapping[Group, Sequence[Spell]]) -> Curves:
        options = _given(call, CURVE_OPTIONS)
        curves = exact.survival_curves(spells, **options)
        if bands := call.provenance.options.get("simultaneous"):
            curves = {
                group: _with_bands(rows, spells[group], bands, options) for group, rows in curves.items()
            }
        self.computed[id(call)] = curves
        return curves

    def curve_of(self, call: Call, relation: str, columns: Sequence[str]) -> tuple[Curves, str]:
        """The curve that a call reads by these columns: recomputed if a model makes it, else as published."""
        by = bare(columns)
        source = self._making(call, relation)
        is_curve = source is not None and source.provenance.macro == "survival_curve"
        if source is not None and is_curve and not self.as_published:
            curves = self.computed.get(id(source)) or self._exact_curves(source, self.spells(source))
            return _by(curves, bare(source.provenance.by), by), ""
        published: dict[Group, list[CurveRow]] = {}
        rows = self.query(call, relation, "select * from {source}")
        exact.check_durations(relation, rows)
        for row in sorted(rows, key=lambda row: int(row["duration"])):
            group = tuple(row[name] for name in by)
            figures = {name: _as_fraction(row.get(name)) for name in FIGURES}
            published.setdefault(group, []).append(CurveRow(group, row["duration"], **figures))
        for group, own in published.items():
            published[group] = list(_with_greenwood_sums(own))
        return published, "It was recomputed from the curve as published, for no model is that curve alone."

    def _of_readout(self, call: Call) -> Expected:
        provenance = call.provenance
        macro, by = provenance.macro, provenance.by
        made_by = self._curve_columns(call)
        if made_by is not None and set(bare(by)) < set(bare(made_by)):
            table = self._mixed(call, made_by)
            return self._table(table, (*bare(by), *compare_readouts.KEYS[macro]))
        curves, note = self.curve_of(call, provenance.options["curve"], by)
        table = compare_readouts.of_curves(macro, curves, provenance.options)
        return self._table(table, (*bare(by), *compare_readouts.KEYS[macro]), note)

    def _curve_columns(self, call: Call) -> tuple[str, ...] | None:
        made = self._maker(call, call.provenance.options["curve"])
        return made.by if made is not None and made.macro == "survival_curve" else None

    def _mixed(self, call: Call, made_by: Sequence[str]) -> compare_readouts.Table:
        """The rows of a read-out that lacks a column of the curve: where curves are mixed up, it says so."""
        macro, options, by = call.provenance.macro, call.provenance.options, bare(call.provenance.by)
        if macro == "survival_beyond":
            raise NotChecked(f"It reads several curves as one; give the call by={list(made_by)}.")
        curves, _ = self.curve_of(call, options["curve"], made_by)
        places = [bare(made_by).index(name) for name in by]
        together: dict[Group, list[Group]] = {}
        for group in curves:
            together.setdefault(tuple(group[place] for place in places), []).append(group)
        table: compare_readouts.Table = {}
        for own, groups in together.items():
            found = compare_readouts.of_curves(macro, {own: curves[groups[0]]}, options)
            for key, figures in found.items():
                mixed = {name: "several_curves" if name == "status" else None for name in figures}
                table[key] = figures if len(groups) == 1 else mixed
        return table

    def _of_spells(self, call: Call) -> Expected:
        macro, options, by = call.provenance.macro, call.provenance.options, bare(call.provenance.by)
        table = compare_readouts.of_spells(macro, self.spells(call), options)
        groups = ("cohort", *by) if macro == "cohort_readout" else by
        return self._table(table, (*groups, *compare_readouts.KEYS[macro]))

    def _of_ends(self, call: Call) -> Expected:
        provenance = call.provenance
        ends = compare_ends.Recomputed(
            lambda relation, select: self.query(call, relation, select),
            self.project.column,
            lambda relation: None if self.as_published else self._maker(call, relation),
        )
        if provenance.options.get("rows", "sound") == "faulty":
            refused = ends.refused(provenance)

            def compare(rows: Rows) -> tuple[Comparison, ...]:
                return (compare_rows(rows, refused, "refused row"),)

            return Expected(compare)
        names = compare_ends.names(provenance)
        return self._table(ends.table(provenance), names, differences=compare_ends.DIFFERENCES)

    def _of_groups(self, call: Call) -> Expected:
        provenance, note = call.provenance, ""
        if provenance.macro in compare_groups.OF_SPELLS:
            columns = compare_groups.columns(provenance)
            grouped = self.spells(call, columns)
            spells = [spell for own in grouped.values() for spell in own]
            label = self._labels(call, provenance.spells or "")
            intakes = self._intakes(call) if provenance.macro == "time_to_events_needed" else None
            table = compare_groups.of_spells(provenance, spells, label, intakes)
        elif provenance.macro in compare_groups.OF_CURVES:
            relation = provenance.options["curve"]
            curves, note = self.curve_of(call, relation, compare_groups.columns(provenance))
            table = compare_groups.of_curves(provenance, curves, self._labels(call, relation))
        else:
            table = compare_groups.of_nothing(provenance)
        names = (*bare(provenance.by), *compare_groups.KEYS[provenance.macro])
        return self._table(table, names, note, compare_groups.DIFFERENCES)

    def _intakes(self, call: Call) -> dict[Group, Fraction | None]:
        """Spells that begin in a unit: of those watched from the start, until anybody was last seen."""
        options, by = call.provenance.options, call.provenance.by
        if options["intake"] is not None:
            return {}
        keys = [self.project.column(name) for name in by]
        named = "".join(f"{column} as group_{place}, " for place, column in enumerate(keys))
        rows = self.query(
            call,
            call.provenance.spells or "",
            f"select {named}sum(case when entry = 0 then weight else 0 end) as begun, "
            "min(case when entry = 0 then started_at end) as first_start, "
            "max(last_seen_at) as last_seen from {source}" + (f" group by {', '.join(keys)}" if keys else ""),
        )
        last = max((as_moment(row["last_seen"]) for row in rows if row["last_seen"]), default=None)
        intakes: dict[Group, Fraction | None] = {}
        for row in rows:
            units = 0
            if row["first_start"] and last:
                units = rebuild.completed_units(as_moment(row["first_start"]), last, options["unit"])
            group = tuple(row[f"group_{place}"] for place in range(len(by)))
            intakes[group] = Fraction(row["begun"]) / units if units > 0 else None
        return intakes

    def _labels(self, call: Call, relation: str) -> Callable[[Any], str]:
        """How the warehouse writes the values of the column compared as text."""
        between = call.provenance.options.get("between")
        if not between:
            return str
        column = self.project.column(between)
        text = self.project.macro("_as_text", column)
        rows = self.query(
            call, relation, f"select distinct {column} as given, {text} as label from {{source}}"
        )
        labels = {row["given"]: row["label"] for row in rows}
        return lambda value: str(labels.get(value, value))

    def _making(self, call: Call, relation: str) -> Call | None:
        """The call that is all of the model which makes a relation, if there is one."""
        made = self.project.made_by(relation) if relation.lower() not in call.ctes else None
        return made.calls[0] if made is not None and len(made.calls) == 1 and made.calls[0].whole else None

    def _maker(self, call: Call, relation: str) -> Provenance | None:
        making = self._making(call, relation)
        return None if making is None else making.provenance

    def _table(
        self,
        table: compare_readouts.Table,
        names: Sequence[str],
        note: str = "",
        differences: Collection[str] = compare_readouts.DIFFERENCES,
    ) -> Expected:
        def compare(rows: Rows) -> tuple[Comparison, ...]:
            found = compare_readouts.compare_readouts(rows, table, names, self.tolerance, differences)
            return (found,)

        return Expected(compare, note=note)

    # What a call reads

    def query(self, call: Call, relation: str, select: str) -> Rows:
        """Run a select in which ``{source}`` stands for what a call reads.

        Raises:
            NotChecked: the relation cannot be read from outside the model.
        """
        if relation.lower().strip('"`') in call.ctes:
            return self.project.query(call.opening + select.format(source=relation) + call.closing)
        if relation.startswith("__dbt__cte__"):
            made = self.project.made_by(relation)
            if made is None:
                raise NotChecked(
                    f"The ephemeral model {relation.removeprefix('__dbt__cte__')} was not found."
                )
            return self.project.query(select.format(source=f"(\n{made.sql}\n) spellcurve_read"))
        try:
            return self.project.query(select.format(source=relation))
        except WarehouseError as error:
            raise NotChecked(f"{relation}, which it reads, cannot be read ({error}).") from error

    def spells(self, call: Call, by: Sequence[str] | None = None) -> dict[Group, list[Spell]]:
        """The spells a call reads, added up by the warehouse, by group; a cohort comes first in its group."""
        provenance = call.provenance
        expressions = [self.project.column(name) for name in (provenance.by if by is None else by)]
        if cohort := provenance.options.get("cohort"):
            column = self.project.column(cohort)
            if period := provenance.options.get("period"):
                day = self.project.macro("_date", column)
                column = self.project.macro(
                    "_date", self.project.macro("date_trunc", period, day, package="dbt")
                )
            expressions.insert(0, column)
        named = [f"{text} as group_{place}" for place, text in enumerate(expressions)]
        columns = ", ".join([*named, "entry", "duration", "event", exact.SUMMED_WEIGHT])
        keys = ", ".join([*expressions, "entry", "duration", "event"])
        rows = self.query(call, provenance.spells or "", f"select {columns} from {{source}} group by {keys}")
        return exact.group_spells(
            exact.as_spell(row, tuple(row[f"group_{place}"] for place in range(len(expressions))))
            for row in rows
        )

    # Spell builders

    def _of_builder(self, call: Call) -> Expected:
        sources = BUILDERS[call.provenance.macro]
        options = dict(call.provenance.options)
        wanted = options.pop("rows")
        subjects: tuple[str | None, ...]
        if call.provenance.macro == "spells_to_first_event":
            subjects = (options["subject"], options.get("event_subject") or options["subject"])
        else:
            subjects = (options["subject"],)
        relations = [options.pop(name) for name in sources]
        where, published, note = self._sampled(call, relations, subjects)
        tables = [
            self._source_rows(call, relation, _needed(call, place), where[place])
            for place, relation in enumerate(relations)
        ]
        marks = self._calendar(call, relations[0], options) if options.get("shape") == "snapshots" else []
        known = {name: value for name, value in options.items() if name in _arguments(call.provenance.macro)}
        sound, faulty = getattr(rebuild, call.provenance.macro)(*[tables[0] + marks, *tables[1:]], **known)
        rows = [row for row in (sound if wanted == "sound" else faulty) if row["subject_id"] != _MARK]
        kind = "spell" if wanted == "sound" else "refused row"

        def compare(given: Rows) -> tuple[Comparison, ...]:
            return (compare_rows(given, rows, kind),)

        def dated(given: Rows) -> str:
            return _other_date(given, rows) if wanted == "sound" else ""

        return Expected(compare, published, note, dated)

    def _sampled(
        self, call: Call, relations: Sequence[str], subjects: Sequence[str | None]
    ) -> tuple[list[str], str, str]:
        """Which rows of each source to pull, which of the published ones, and a sentence on it."""
        if subjects[0] is None:
            counted = self._count(call, relations[0])
            if counted > MOST_ROWS:
                raise NotChecked(
                    f"It has no subject to take a sample by and {counted:,} rows, over {MOST_ROWS:,}, "
                    "too many to rebuild; give the call a subject."
                )
            return [""], "", ""
        columns = [self.project.column(name) for name in subjects if name is not None]
        several = []
        for relation, column in zip(relations, columns, strict=True):
            if relation.lower() in call.ctes:
                several.append(f"select {column} as subject from {relation} where {column} is not null")
            else:
                several.append(
                    f"select {column} as subject from {self._readable(relation)} where {column} is not null"
                )
        union = (
            " union ".join(several)
            if len(several) > 1
            else several[0].replace("select", "select distinct", 1)
        )
        order = self.project.macro("hash", "subject", package="dbt")
        inner = (
            f"select subject from ({union}) spellcurve_subjects order by {order}, subject limit {self.sample}"
        )
        picked = f"select subject from ({inner}) spellcurve_sample"
        found = self.project.query(call.opening + picked + call.closing if call.ctes else picked)
        where, nulls = [], True
        for relation, column in zip(relations, columns, strict=True):
            nulls = nulls and self._count(call, relation, f" where {column} is null") <= MOST_ROWS
        for column in columns:
            also = f" or {column} is null" if nulls else ""
            where.append(f" where {column} in ({picked}){also}")
        also = " or subject_id is null" if nulls else " and subject_id is not null"
        if call.ctes:
            texts = ", ".join(self.project.macro("_text", str(row["subject"])) for row in found) or "''"
            published = f" where {self.project.macro('_as_text', 'subject_id')} in ({texts}){also}"
        else:
            published = f" where (subject_id in ({picked})){also}"
        note = f"{len(found):,} subjects were rebuilt."
        return where, published, note

    def _count(self, call: Call, relation: str, where: str = "") -> int:
        return int(
            self.query(call, relation, f"select count(*) as counted from {{source}}{where}")[0]["counted"]
        )

    def _readable(self, relation: str) -> str:
        if not relation.startswith("__dbt__cte__"):
            return relation
        made = self.project.made_by(relation)
        if made is None:
            raise NotChecked(f"The ephemeral model {relation.removeprefix('__dbt__cte__')} was not found.")
        return f"(\n{made.sql}\n) spellcurve_read"

    def _source_rows(self, call: Call, relation: str, names: Sequence[str], where: str) -> Rows:
        columns = ", ".join(f"{self.project.column(name)} as c_{place}" for place, name in enumerate(names))
        text = f"select {columns} from {{source}}{where.replace('{', '{{').replace('}', '}}')}"
        rows = self.query(call, relation, text)
        return [{name: local(row[f"c_{place}"]) for place, name in enumerate(names)} for row in rows]

    def _calendar(self, call: Call, relation: str, options: Mapping[str, Any]) -> Rows:
        """A mark for each day in the snapshots, of a subject that is none: the days of all subjects count."""
        names = [options["effective"], *([options["recorded_at"]] if options.get("recorded_at") else [])]
        columns = [self.project.column(name) for name in names]
        chosen = ", ".join(f"{column} as c_{place}" for place, column in enumerate(columns))
        sound = " and ".join(
            f"{self.project.column(options[name])} is not null" for name in ("subject", "status")
        )
        rows = self.query(call, relation, f"select distinct {chosen} from {{source}} where {sound}")
        return [
            dict.fromkeys(_needed(call, 0))
            | {name: local(row[f"c_{place}"]) for place, name in enumerate(names)}
            | {options["subject"]: _MARK, options["status"]: _MARK}
            for row in rows
        ]


#: The builders, and the names of what they read.
BUILDERS = {
    "spells_from_intervals": ("relation",),
    "spells_from_durations": ("relation",),
    "spells_from_event_log": ("relation",),
    "spells_from_status_history": ("relation",),
    "spells_from_activity": ("relation",),
    "spells_to_first_event": ("origins", "events"),
}
_MARK = "\x00 a day of the calendar"
_COLUMNS = (
    "subject",
    "started",
    "ended",
    "happened",
    "kind",
    "effective",
    "status",
    "sequence",
    "recorded_at",
)
_NUMBERED = ("duration", "event", "entry", "weight", "cause")


def _given(call: Call, names: Iterable[str]) -> dict[str, Any]:
    options = call.provenance.options
    return {name: options[name] for name in names if name in options}


def _arguments(builder: str) -> Sequence[str]:
    code = getattr(rebuild, builder).__code__
    return code.co_varnames[: code.co_argcount + code.co_kwonlyargcount]


def _needed(call: Call, place: int) -> list[str]:
    """Columns of a source that a builder reads."""
    options = call.provenance.options
    if call.provenance.macro == "spells_to_first_event":
        own = ("subject", "origin_at") if place == 0 else ("event_at", "cause")
        names = [options.get(name) for name in (*own, "recorded_at")]
        if place == 1:
            names.append(options.get("event_subject") or options["subject"])
    elif call.provenance.macro == "spells_from_durations":
        names = [options.get(name) for name in ("subject", *_NUMBERED)]
    else:
        names = [options.get(name) for name in (*_COLUMNS, "cause")]
    names += options.get("carry") or [] if place == 0 else []
    return list(dict.fromkeys(name for name in names if name))


def bare(names: Iterable[str]) -> tuple[str, ...]:
    """Column names as a query gives them: without quotes, in lower case."""
    return tuple(name.strip('"`[]').lower() for name in names)


def _by(curves: Curves, made_by: tuple[str, ...], wanted: tuple[str, ...]) -> Curves:
    """Curves by the same columns in another order."""
    if set(made_by) != set(wanted):
        raise NotChecked(
            f"It reads the curve by {', '.join(wanted) or 'nothing'}, but that was made by "
            f"{', '.join(made_by) or 'nothing'}; give the call the same by."
        )
    places = [made_by.index(name) for name in wanted]
    return {tuple(group[place] for place in places): rows for group, rows in curves.items()}


def _with_greenwood_sums(rows: Iterable[CurveRow]) -> Iterator[CurveRow]:
    """Add up d / (n (n - d)) over the rows of a published curve."""
    total: Fraction | None = Fraction(0)
    for row in rows:
        if row.at_risk is None or row.events is None or row.survival is None or total is None:
            total = None
        elif row.events:
            n, d = Fraction(row.at_risk), Fraction(row.events)
            total = None if d >= n else total + d / (n * (n - d))
        yield replace(row, greenwood_sum=total)


def _exact(value: Any) -> Any:
    return (
        Fraction(value)
        if isinstance(value, float) and value == value and abs(value) != float("inf")
        else value
    )


def _as_fraction(value: Any) -> Any:
    return Fraction(value) if isinstance(value, int) else _exact(value)


def _with_bands(
    rows: Sequence[CurveRow], spells: Sequence[Spell], kind: str, options: Mapping[str, Any]
) -> list[CurveRow]:
    """Replace pointwise bounds by those of a simultaneous band, whose reach takes the place of z."""
    whole = exact.survival_curve(spells)
    confidence, scale = options["confidence"], options["interval_scale"]
    found = exact_readouts.band_reaches(whole, kind, confidence, options["horizon"])
    reaches = dict(zip((row.duration for row in whole), found, strict=True))
    z = Fraction(exact.normal_quantile(confidence))
    banded, reach = [], None
    for row in rows:
        before = [duration for duration in reaches if duration <= row.duration]
        reach = reaches[max(before)] if before else None
        if row.survival is None or row.survival == 0 or row.survival_lower is None:
            banded.append(row)
        elif reach is None:
            banded.append(replace(row, survival_lower=1.0, survival_upper=1.0))
        else:
            variance = (Fraction(reach) / z) ** 2
            with localcontext(Context(prec=60)):
                lower, upper = exact._interval(Fraction(row.survival), variance, confidence, scale)
            banded.append(replace(row, survival_lower=lower, survival_upper=upper))
    return banded


def _other_date(given: Rows, expected: Rows) -> str:
    """Say so if spells were cut at another moment than they should have been."""
    ends = [
        max(
            (
                as_moment(row["last_seen_at"])
                for row in rows
                if row.get("event") == 0 and row.get("last_seen_at")
            ),
            default=None,
        )
        for rows in (given, expected)
    ]
    if None in ends or ends[0] == ends[1]:
        return ""
    return f" Its unfinished spells were last seen at {ends[0]}, those of a build now would be at {ends[1]}."
