"""Recompute what the comparisons of groups publish: tests, trends, differences, events needed.

Each function gives the table that a call should make: the values of ``names`` to the figures of that row. The
warehouse's own text of a group's value comes as its label.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict
from fractions import Fraction
from typing import Any

from spellcurve import exact_comparisons, exact_differences
from spellcurve.compare_readouts import Table
from spellcurve.exact import CurveRow, Spell
from spellcurve.provenance import Provenance

Group = tuple[Any, ...]

#: Columns which, beside those of ``by``, tell rows apart.
KEYS: dict[str, tuple[str, ...]] = {
    "log_rank_test": ("comparison", "group_a", "group_b"),
    "trend_test": (),
    "difference_at": ("group_a", "duration"),
    "difference_in_restricted_mean": ("group_a", "horizon"),
    "events_needed": (),
    "time_to_events_needed": (),
}
#: What reads spells, what reads a curve; the rest reads nothing.
OF_SPELLS = ("log_rank_test", "trend_test", "time_to_events_needed")
OF_CURVES = ("difference_at", "difference_in_restricted_mean")
#: Figures that are differences of larger numbers, or squares of such.
DIFFERENCES = ("statistic", "z", "difference", "difference_lower", "difference_upper")

#: With more durations than this, products keep ``_DIGITS`` digits instead of all.
_LONG, _DIGITS = 40, 80


def columns(provenance: Provenance) -> tuple[str, ...]:
    """The columns by which spells are grouped: those of ``by``, the one compared, those of strata."""
    options = provenance.options
    compared = [options["between"]] if options.get("between") else []
    return (*provenance.by, *compared, *(options.get("strata") or ()))


def of_spells(
    provenance: Provenance,
    spells: Sequence[Spell],
    label: Callable[[Any], str],
    intakes: Mapping[Group, Fraction | None] | None = None,
) -> Table:
    """Compute the rows of a comparison of spells.

    Args:
        provenance: of one of ``OF_SPELLS``.
        spells: their groups hold the values of ``columns``.
        label: the warehouse's text of a value of the column compared.
        intakes: values of ``by`` to how many spells begin in a unit, where the call does not say.
    """
    options, width = provenance.options, len(provenance.by)
    segments: dict[Group, list[Spell]] = {}
    if provenance.macro == "time_to_events_needed" and not width:
        segments[()] = []  # a row even of no spells
    for spell in spells:
        own = Spell(spell.entry, spell.duration, spell.event, spell.weight, spell.cause, spell.group[width:])
        segments.setdefault(spell.group[:width], []).append(own)
    table: Table = {}
    for segment, own_spells in segments.items():
        if provenance.macro == "log_rank_test":
            for row in _log_rank_rows(options, own_spells, label):
                figures = asdict(row)
                key = tuple(figures.pop(name) for name in KEYS["log_rank_test"])
                table[(*segment, *key)] = figures
        elif provenance.macro == "trend_test":
            found = exact_differences.trend_test(
                own_spells,
                _scores(options["scores"], own_spells, label),
                options["weighting"],
                options["confidence"],
            )
            if found is not None:
                table[segment] = asdict(found) | {
                    "degrees_of_freedom": 1 if found.status == "compared" else None
                }
        else:
            given = options["intake"]
            intake = Fraction(given) if given is not None else (intakes or {}).get(segment)
            needed = exact_differences.events_needed(
                *(options[name] for name in ("hazard_ratio", "power", "alpha", "allocation", "sides"))
            )
            table[segment] = asdict(
                exact_differences.time_to_events_needed(
                    own_spells,
                    needed,
                    options["hazard_ratio"],
                    intake,
                    options["allocation"],
                    options["intake_lasts"],
                    options["longest"],
                )
            )
    return table


def _log_rank_rows(
    options: Mapping[str, Any], spells: Sequence[Spell], label: Callable[[Any], str]
) -> list[exact_comparisons.ComparedRow]:
    reference = options["reference"]
    if reference is not None:
        values = {spell.group[0] for spell in spells if spell.group[0] is not None}
        reference = next((value for value in values if _is(value, reference, label)), reference)
    return exact_comparisons.log_rank_test(
        spells,
        options["weighting"],
        options["pairs"],
        reference,
        options["adjustment"],
        options["confidence"],
        options["most_groups"],
        label,
        _DIGITS if len({spell.duration for spell in spells if spell.event}) > _LONG else None,
    )


def _is(value: Any, reference: Any, label: Callable[[Any], str]) -> bool:
    if isinstance(reference, int | float):
        return not isinstance(value, str) and value == reference
    return label(value) == reference


def _scores(pairs: Any, spells: Sequence[Spell], label: Callable[[Any], str]) -> dict[Any, Fraction]:
    """The score of each group that has one: from the pairs in the call, or its own number."""
    scores = {}
    for value in {spell.group[0] for spell in spells}:
        if pairs is None:
            number = _number(value)
            if number is not None:
                scores[value] = number
            continue
        for item, score in pairs:
            same = value is None if item is None else value is not None and _has_score(value, item, label)
            if same:
                scores[value] = Fraction(score)
                break
    return scores


def _has_score(value: Any, item: Any, label: Callable[[Any], str]) -> bool:
    if isinstance(item, int | float):
        return _number(value) == Fraction(item)
    return label(value) == item


def _number(value: Any) -> Fraction | None:
    try:
        return None if value is None or isinstance(value, bool) else Fraction(str(value).strip())
    except ValueError:
        return None


def of_curves(
    provenance: Provenance,
    curves: Mapping[Group, Sequence[CurveRow]],
    label: Callable[[Any], str],
) -> Table:
    """Compute the rows of differences between curves.

    Args:
        provenance: of one of ``OF_CURVES``.
        curves: values of ``columns`` to that curve's rows, with their Greenwood sums.
        label: the warehouse's text of a value of the column compared.
    """
    options, macro = provenance.options, provenance.macro
    at = macro == "difference_at"
    read = exact_differences.survival_figure if at else exact_differences.mean_figure
    figure = "survival" if at else "restricted_mean"
    reference = options["reference"]
    table: Table = {}
    for group, rows in curves.items():
        *segment, value = group
        if value is not None and _is(value, reference, label):
            continue
        others = (
            other
            for key, other in curves.items()
            if list(key[:-1]) == segment and key[-1] is not None and _is(key[-1], reference, label)
        )
        beside = next(others, None)
        for place in options["durations" if at else "horizon"]:
            found = exact_differences.difference(
                read(rows, place),
                None if beside is None else read(beside, place),
                1 if at else place,
                options["confidence"],
                options["test_scale"] if at else "linear",
            )
            figures = asdict(found)
            figures[f"{figure}_a"], figures[f"{figure}_b"] = figures.pop("figure_a"), figures.pop("figure_b")
            figures["group_b"] = reference if isinstance(reference, str) else str(reference)
            name = None if value is None else label(value)
            table[(*segment, name, place)] = figures
    return table


def of_nothing(provenance: Provenance) -> Table:
    """Compute the one row of ``events_needed``."""
    names = ("hazard_ratio", "power", "alpha", "allocation", "sides")
    options = provenance.options
    needed = exact_differences.events_needed(*(options[name] for name in names))
    figures = {name: options[name] for name in names}
    return {(): figures | {"events_exact": needed, "events_needed": math.ceil(needed)}}
