"""The same survival curve from lifelines, an independent estimator in double precision.

What lifelines vouches for (see ``IndependentCurve.columns``):

- at_risk, events, censored and hazard: from its event table. That table counts the spells that enter at t as
  at risk at t, though its curve does not; they are taken off again here, except at 0, where those with entry
  0 are at risk.
- survival: its product-limit curve, which already leaves out those who enter at t.
- survival_lower, survival_upper: on the log-log scale alone, the only one it computes, and for whole weights
  alone, since it rounds the number at risk down in the variance.
- cumulative_hazard: its Nelson-Aalen sum, with ties taken together (no smoothing).

What it does not vouch for, left None: std_error (it keeps that figure to itself), all other bounds, and
cumulative_hazard_std_error (it uses the binomial variance d (n - d) / n³ where ours is d / n²). Where
survival falls to 0 while later spells are still to enter, it refuses to fit a curve: then it vouches for the
counts and the cumulative hazard alone.

Spells with entry = duration > 0, which were never at risk, are dropped before it sees them: it would count
them.
"""

from __future__ import annotations

import warnings
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd
from lifelines import KaplanMeierFitter, NelsonAalenFitter
from lifelines.exceptions import StatError
from lifelines.utils import survival_table_from_events

from spellcurve.exact import (
    BOUNDS,
    COUNTS,
    CurveRow,
    Spell,
    as_published,
    check_options,
    is_whole,
    shown_durations,
)


@dataclass(frozen=True)
class IndependentCurve:
    """One group's curve from lifelines, and the columns it vouches for; all other figures are None."""

    rows: list[CurveRow]
    columns: tuple[str, ...]


def independent_curves(
    spells_by_group: Mapping[tuple[Any, ...], Iterable[Spell]], **options: Any
) -> dict[tuple[Any, ...], IndependentCurve]:
    """Compute the curve of every group; arguments as for ``spellcurve.exact.survival_curves``."""
    return {
        group: independent_curve([replace(spell, group=group) for spell in spells], **options)
        for group, spells in spells_by_group.items()
    }


def independent_curve(
    spells: Iterable[Spell],
    confidence: float = 0.95,
    interval_scale: str = "log-log",
    horizon: int | None = None,
    grid: str = "steps",
    minimum_at_risk: float = 0,
    small_counts: str = "keep",
    weights: str = "whole",
) -> IndependentCurve:
    """Compute one group's curve with lifelines; arguments as for ``spellcurve.exact.survival_curve``.

    Raises:
        ValueError: an option is unknown.
    """
    check_options(confidence, interval_scale, horizon, grid, small_counts, weights)
    spells = list(spells)
    if not spells:
        return IndependentCurve([], ())
    shown = shown_durations(spells, grid, horizon)
    table, columns = _fit([spell for spell in spells if spell.counts], confidence, interval_scale)
    rows = [
        as_published(row, minimum_at_risk, small_counts, weights)
        for row in _read_off(table, columns, shown, spells[0].group)
    ]
    return IndependentCurve(rows, columns)


def _fit(
    spells: Sequence[Spell], confidence: float, interval_scale: str
) -> tuple[pd.DataFrame, tuple[str, ...]]:
    """Fit both estimators; one row per duration at which anything happens, figures under our names."""
    if not spells:
        return pd.DataFrame(columns=["at_risk"], dtype=float), (*COUNTS, "hazard")
    duration = np.array([spell.duration for spell in spells], dtype=float)
    event = np.array([spell.event for spell in spells], dtype=int)
    entry = np.array([spell.entry for spell in spells], dtype=float)
    weight = np.array([float(spell.weight) for spell in spells])
    table = _counts(survival_table_from_events(duration, event, entry, weights=weight))
    columns: tuple[str, ...] = (*COUNTS, "hazard", "cumulative_hazard")
    options = {"event_observed": event, "entry": entry, "weights": weight}
    with warnings.catch_warnings(), np.errstate(all="ignore"):
        warnings.simplefilter("ignore")  # about few spells at risk and weights that are not whole
        hazard_sum = NelsonAalenFitter(nelson_aalen_smoothing=False).fit(duration, **options)
        table["cumulative_hazard"] = _on(table, hazard_sum.cumulative_hazard_.iloc[:, 0])
        try:
            curve = KaplanMeierFitter(alpha=1 - confidence).fit(duration, **options)
        except StatError:
            return table, columns
    table["survival"] = _on(table, curve.survival_function_.iloc[:, 0])
    columns = (*columns, "survival")
    if interval_scale == "log-log" and all(is_whole(spell.weight) for spell in spells):
        for place, name in enumerate(BOUNDS):
            table[name] = _on(table, curve.confidence_interval_.iloc[:, place])
        columns = (*columns, *BOUNDS)
    return table, columns


def _counts(event_table: pd.DataFrame) -> pd.DataFrame:
    """Take those who enter at each duration but 0 out of the number at risk in lifelines' event table."""
    entrance = event_table["entrance"].where(event_table.index > 0, 0)
    at_risk = event_table["at_risk"] - entrance
    events = event_table["observed"]
    return pd.DataFrame(
        {
            "at_risk": at_risk,
            "events": events,
            "censored": event_table["removed"] - events,
            "hazard": (events / at_risk.where(at_risk > 0, 1)),
            "at_risk_after": event_table["at_risk"] - event_table["removed"],
        }
    )


def _on(table: pd.DataFrame, curve: pd.Series) -> pd.Series:
    return curve.reindex(table.index, method="ffill")


def _read_off(
    table: pd.DataFrame, columns: Sequence[str], durations: Iterable[int], group: tuple[Any, ...]
) -> list[CurveRow]:
    """Read the step functions at the durations asked for."""
    rows = []
    for t in durations:
        past = table[table.index <= t]
        figures: dict[str, Any] = dict.fromkeys(columns, 0.0)
        if "survival" in columns:
            figures.update(dict.fromkeys(("survival", *(set(BOUNDS) & set(columns))), 1.0))
        if len(past):
            latest = past.iloc[-1]
            figures = {name: float(latest[name]) for name in columns}
            if past.index[-1] < t:
                figures.update(at_risk=float(latest["at_risk_after"]), events=0.0, censored=0.0, hazard=0.0)
        if figures.get("survival") == 0:
            figures.update(dict.fromkeys(BOUNDS))
        rows.append(CurveRow(group=group, duration=t, **figures))
    return rows
