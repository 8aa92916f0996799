"""Compare published read-outs with the figures that exact arithmetic gives for them.

Each function named after a macro gives what its table has to hold: group values and the values of ``KEYS``
to the figures of that row. ``compare_readouts`` compares.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Iterable, Mapping, Sequence
from decimal import Decimal
from fractions import Fraction
from typing import Any

from spellcurve import exact_readouts
from spellcurve.compare import TOLERANCE, Comparison, Disagreement
from spellcurve.exact import CurveRow, Spell, survival_curve

#: Columns which, beside the groups, tell the rows of a read-out apart.
KEYS = {
    "survival_at": ("duration",),
    "survival_quantiles": ("share",),
    "restricted_mean": ("horizon",),
    "survival_beyond": ("survived", "duration"),
    "cohort_readout": ("duration",),
    "hazard_by_band": ("from_duration",),
}
#: What reads a curve; the others read spells.
OF_CURVES = ("survival_at", "survival_quantiles", "restricted_mean", "survival_beyond")

#: A figure that is a difference of two larger numbers loses leading digits; this close to what is expected
#: it agrees, whatever the ratio.
_ALLOWANCE = 1e-12
DIFFERENCES = (
    "survival_lower",
    "survival_upper",
    "event_share",
    "event_share_lower",
    "event_share_upper",
    "restricted_mean_lower",
)

Group = tuple[Any, ...]
Figures = dict[str, Any]
Table = dict[Group, Figures]


def of_curves(macro: str, curves: Mapping[Group, Sequence[CurveRow]], options: Mapping[str, Any]) -> Table:
    """Compute the rows of a read-out of a curve.

    Args:
        macro: one of ``OF_CURVES``.
        curves: group values to that group's rows, by duration.
        options: as the macro's provenance has them.
    """
    table = {}
    for group, rows in curves.items():
        if macro == "survival_at":
            for duration in options["durations"]:
                table[(*group, duration)] = _shares(exact_readouts.survival_at(rows, duration))
        elif macro == "survival_quantiles":
            for share in options["shares"]:
                table[(*group, share)] = _without(exact_readouts.survival_quantile(rows, share), "share")
        elif macro == "survival_beyond":
            confidence, interval_scale = options["confidence"], options["interval_scale"]
            for survived in options["survived"]:
                for one in exact_readouts.survival_beyond(rows, survived, confidence, interval_scale):
                    table[(*group, survived, one.duration)] = _without(one, "survived", "duration")
        else:
            for horizon in options["horizon"]:
                mean = exact_readouts.restricted_mean(
                    rows, horizon, options["survived"], options["confidence"]
                )
                table[(*group, horizon)] = _without(mean, "horizon")
    return table


def of_spells(macro: str, spells: Mapping[Group, Sequence[Spell]], options: Mapping[str, Any]) -> Table:
    """Compute the rows of a read-out of spells.

    Args:
        macro: ``cohort_readout``, whose cohort is the first value of a group, or ``hazard_by_band``.
        spells: group values to the spells of that group.
        options: as the macro's provenance has them.
    """
    table = {}
    for group, own in spells.items():
        if macro == "hazard_by_band":
            width, confidence, horizon = (options[name] for name in ("width", "confidence", "horizon"))
            for band in exact_readouts.hazard_by_band(own, width, confidence, horizon):
                table[(*group, band.from_duration)] = _without(band, "from_duration")
            continue
        names = ("confidence", "interval_scale", "minimum_at_risk", "weights")
        rows = survival_curve(own, **{name: options[name] for name in names})
        for duration in options["durations"]:
            cell = _shares(exact_readouts.survival_at(rows, duration))
            table[(*group, duration)] = cell | _plain_shares(own, duration, cell["status"])
    return table


def _without(row: Any, *keys: str) -> Figures:
    return {name: figure for name, figure in vars(row).items() if name not in keys}


def _shares(found: exact_readouts.SurvivalAt) -> Figures:
    def rest(share: Any) -> Any:
        return None if share is None else 1 - Fraction(share)

    return _without(found, "duration") | {
        "event_share": rest(found.survival),
        "event_share_lower": rest(found.survival_upper),
        "event_share_upper": rest(found.survival_lower),
    }


def _plain_shares(spells: Iterable[Spell], duration: int, status: str) -> Figures:
    """Count the spells of a cohort, and what a share without regard to censoring makes of them."""
    counted = [spell for spell in spells if spell.counts]
    total = sum((Fraction(spell.weight) for spell in counted), Fraction(0))
    events = sum(
        (Fraction(spell.weight) for spell in counted if spell.event and spell.duration <= duration),
        Fraction(0),
    )
    censored = sum(
        (Fraction(spell.weight) for spell in counted if not spell.event and spell.duration < duration),
        Fraction(0),
    )
    hidden = not total or status == exact_readouts.TOO_FEW_AT_RISK
    return {
        "spells": total,
        "events": events,
        "censored": censored,
        "naive_event_share": None if hidden else events / total,
    }


def compare_readouts(
    actual: Iterable[Mapping[str, Any]],
    expected: Table,
    names: Sequence[str],
    tolerance: float = TOLERANCE,
    differences: Collection[str] = DIFFERENCES,
) -> Comparison:
    """Compare a published read-out with the expected one, status included.

    Args:
        actual: rows as the warehouse returned them.
        expected: values of the columns in ``names`` to the figures of that row, by column.
        names: the group columns, then the macro's ``KEYS``.
        tolerance: largest relative difference that still counts as agreement.
        differences: columns that may also be off by a rounding of larger numbers.
    """
    found = Comparison()
    published: dict[Group, Mapping[str, Any]] = {}
    for row in actual:
        found.rows += 1
        key = tuple(row.get(name) for name in names)
        if key in published:
            _wrong(found, "duplicate row", names, key, "is in the table more than once")
        published.setdefault(key, row)
    for key, figures in expected.items():
        match = published.pop(key, None)
        if match is None:
            _wrong(found, "missing row", names, key, "is missing from the table")
            continue
        for column, right in figures.items():
            found.figures += 1
            allowance = _ALLOWANCE if column in differences else 0.0
            _compare(found, names, key, column, right, match.get(column), tolerance, allowance)
    for key in published:
        _wrong(found, "extra row", names, key, "should not be in the table")
    return found


def _place(names: Sequence[str], key: Group) -> str:
    pairs = zip(names, key, strict=True)
    return ", ".join(f"{name} {_shown(value)}" for name, value in pairs) or "the only place"


def _wrong(found: Comparison, kind: str, names: Sequence[str], key: Group, what: str) -> None:
    sentence = f"The row at {_place(names, key)} {what}."
    found.disagreements.append(Disagreement(kind, key[:-1], _last(key), None, None, None, sentence))


def _last(key: Group) -> Any:
    return key[-1] if key else None


def _compare(
    found: Comparison,
    names: Sequence[str],
    key: Group,
    column: str,
    right: Any,
    given: Any,
    tolerance: float,
    allowance: float,
) -> None:
    place = f"{column} at {_place(names, key)}"
    if right is None or given is None or isinstance(right, str) or not _is_number(given):
        agrees, kind = right == given, "wrong null" if right is None or given is None else "wrong number"
    else:
        gap = abs(Fraction(given) - Fraction(right))
        if gap <= allowance:
            return
        difference = 0.0 if not gap else float(gap / abs(Fraction(right))) if right else math.inf
        agrees, kind = difference <= tolerance, "wrong number"
        if difference > found.largest_difference:
            found.largest_difference, found.largest_at = difference, place
    if not agrees:
        sentence = f"{place} is {_shown(given)}, but {_shown(right)} is expected."
        found.disagreements.append(Disagreement(kind, key[:-1], _last(key), column, right, given, sentence))


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float | Decimal) and math.isfinite(value)


def _shown(value: Any) -> str:
    if value is None:
        return "null"
    return repr(float(value)) if isinstance(value, Fraction) and value.denominator > 1 else str(value)
