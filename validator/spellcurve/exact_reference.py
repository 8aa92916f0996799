"""Recomputes every reference table in exact fractions, from the observations in the package's own files."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from fractions import Fraction
from pathlib import Path
from typing import Any

from scipy.stats import chi2

from spellcurve import compare_readouts, exact_comparisons, exact_incidence, rebuild
from spellcurve.compare import TOLERANCE, Comparison, compare_curves
from spellcurve.compare_readouts import Table
from spellcurve.compare_readouts import compare_readouts as compare_tables
from spellcurve.compare_spells import compare_rows
from spellcurve.exact import (
    CURVE_OPTIONS,
    CurveRow,
    Spell,
    as_spell,
    group_spells,
    normal_quantile,
    survival_curves,
)
from spellcurve.package import read_reference
from spellcurve.provenance import Provenance

Group = tuple[Any, ...]
Row = dict[str, Any]

_LOG_RANK_FIGURES = (
    "group_a",
    "group_b",
    "weighting",
    "statistic",
    "degrees_of_freedom",
    "p_value",
    "p_value_adjusted",
    "observed_a",
    "expected_a",
    "observed_b",
    "expected_b",
    "hazard_ratio",
    "hazard_ratio_lower",
    "hazard_ratio_upper",
    "status",
)


class ExactReference:
    """What the reference models have to hold.

    Args:
        package: folder of the package's dbt project.
        calls: name of each model to the provenance of the macro call that it is.
    """

    def __init__(self, package: Path, calls: Mapping[str, Provenance]) -> None:
        self.package = package
        self.calls = calls

    def compare(
        self, model: str, rows: Sequence[Mapping[str, Any]], tolerance: float = TOLERANCE
    ) -> Comparison:
        """Compare the rows of a model, as the warehouse returned them.

        Raises:
            ValueError: there is no way to recompute what the model calls.
        """
        call = self.calls[model]
        macro, by = call.macro, call.by
        if macro == "spells_from_durations":
            return compare_rows(rows, self._spell_rows(model), "spell")
        if macro == "survival_curve":
            return compare_curves(rows, self._curves(model), by, tolerance)
        if macro in ("survival_quantiles", "restricted_mean"):
            table = compare_readouts.of_curves(
                macro, self._curves(_name(call.options["curve"])), call.options
            )
            return compare_tables(rows, table, (*by, *compare_readouts.KEYS[macro]), tolerance)
        if macro == "cumulative_incidence":
            return compare_tables(rows, self._incidences(call), (*by, "cause", "duration"), tolerance)
        if macro == "actuarial_table":
            return compare_tables(rows, self._life_tables(call), (*by, "from_duration"), tolerance)
        if macro == "mean_cumulative_count":
            return compare_tables(rows, self._counts(call), ("duration",), tolerance)
        if macro == "log_rank_test":
            return compare_tables(rows, self._log_rank(call), ("comparison",), tolerance)
        if macro == "incidence_gray_test":
            return compare_tables(rows, self._gray(call), ("status",), tolerance)
        raise ValueError(f"there is no way to recompute {macro}")

    def _seed(self, relation: str) -> list[Row]:
        """The rows of a seed: whole numbers as such, an empty cell as None."""
        rows = read_reference(self.package, _name(relation).removeprefix("reference_"))
        return [{name: _cell(value) for name, value in row.items()} for row in rows]

    def _spell_rows(self, model: str) -> list[Row]:
        options = dict(self.calls[model].options)
        seed = self._seed(options.pop("relation"))
        options.pop("rows")
        sound, faulty = rebuild.spells_from_durations(seed, **options)
        if faulty:
            raise ValueError(f"{len(faulty)} of its observations are faulty")
        return [dict(row) for row in sound]

    def _spells(self, relation: str, groups: Iterable[str]) -> dict[Group, list[Spell]]:
        names = tuple(groups)
        return group_spells(
            as_spell(row, tuple(row[name] for name in names), row["cause"])
            for row in self._spell_rows(_name(relation))
        )

    def _curves(self, model: str) -> dict[Group, list[CurveRow]]:
        call = self.calls[model]
        options = {name: call.options[name] for name in CURVE_OPTIONS if name in call.options}
        return survival_curves(self._spells(call.spells or "", call.by), **options)

    def _incidences(self, call: Provenance) -> Table:
        names = ("confidence", "interval_scale", "horizon", "grid", "others")
        options = {name: call.options[name] for name in names}
        figures = ("at_risk", "events", "incidence", "std_error", "incidence_lower", "incidence_upper")
        return {
            (*group, row.cause, row.duration): {name: getattr(row, name) for name in figures}
            for group, spells in self._spells(call.spells or "", call.by).items()
            for row in exact_incidence.cumulative_incidence(spells, **options)
        }

    def _life_tables(self, call: Provenance) -> Table:
        figures = (
            "to_duration",
            "entering",
            "censored",
            "exposed",
            "events",
            "hazard_share",
            "survival",
            "std_error",
        )
        return {
            (*group, row.from_duration): {name: getattr(row, name) for name in figures}
            for group, spells in self._spells(call.spells or "", call.by).items()
            for row in exact_incidence.actuarial_table(spells, call.options["width"], call.options["horizon"])
        }

    def _counts(self, call: Provenance) -> Table:
        options = call.options
        if options["happened_as"] != "tenure" or options["interval_scale"] != "log" or call.by:
            raise ValueError("mean counts are recomputed for tenures and intervals on the log scale alone")
        spells = self._spell_rows(_name(call.spells or ""))
        events = self._seed(options["events"])
        tenures: dict[Any, list[int]] = {row["subject_id"]: [] for row in spells}
        for event in events:
            tenures[event[options["subject"]]].append(event[options["happened"]])
        units = [
            exact_incidence.Unit(
                ((row["entry"], row["duration"]),), tuple(tenures[row["subject_id"]]), Fraction(row["weight"])
            )
            for row in spells
        ]
        z = float(normal_quantile(options["confidence"]))
        table = {}
        for row in exact_incidence.mean_cumulative_count(units, options["horizon"], options["grid"]):
            variance = row.robust_variance if options["variance"] == "robust" else row.naive_variance
            error: float | None = math.sqrt(variance)
            lower: float | None
            upper: float | None
            if row.mean_count == 0:
                error, lower, upper = 0.0, 0.0, 0.0
            elif not error:
                error = lower = upper = None
            else:
                mean = float(row.mean_count)
                lower, upper = (mean * math.exp(sign * z * error / mean) for sign in (-1, 1))
            table[(row.duration,)] = {
                "at_risk": row.at_risk,
                "events": row.events,
                "mean_count": row.mean_count,
                "std_error": error,
                "mean_count_lower": lower,
                "mean_count_upper": upper,
            }
        return table

    def _log_rank(self, call: Provenance) -> Table:
        options = call.options
        if call.by:
            raise ValueError("tests are recomputed without by alone")
        spells = self._spells(call.spells or "", [options["between"], *options["strata"]])
        names = ("weighting", "pairs", "reference", "adjustment", "confidence", "most_groups")
        found = exact_comparisons.log_rank_test(
            [spell for own in spells.values() for spell in own], **{name: options[name] for name in names}
        )
        return {(row.comparison,): {name: getattr(row, name) for name in _LOG_RANK_FIGURES} for row in found}

    def _gray(self, call: Provenance) -> Table:
        if call.by:
            raise ValueError("tests are recomputed without by alone")
        groups = self._spells(call.spells or "", [call.options["between"]])
        ordered = [groups[key] for key in sorted(groups, key=str)]
        test = exact_incidence.gray_test(ordered, call.options["causes"])
        if test.statistic is None or test.degrees_of_freedom != len(ordered) - 1:
            raise ValueError("there is nothing to compare")
        return {
            ("compared",): {
                "statistic": test.statistic,
                "degrees_of_freedom": test.degrees_of_freedom,
                "p_value": float(chi2.sf(float(test.statistic), test.degrees_of_freedom)),
            }
        }


def _name(relation: str) -> str:
    """The name of a relation as it stands in SQL, without its schema and quotes."""
    return relation.rsplit(".", 1)[-1].strip('"`[]').lower()


def _cell(text: str) -> Any:
    if text == "":
        return None
    try:
        return int(text)
    except ValueError:
        return text
