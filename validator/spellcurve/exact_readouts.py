"""Read-outs of a survival curve in exact rational arithmetic, straight from their definitions.

They read the rows of one group as ``spellcurve.exact`` gives them, on either grid, blanked out below
``minimum_at_risk`` or not. What is rational is a ``fractions.Fraction``; roots, logarithms and normal
quantiles are worked out with 60 decimal digits and rounded to a float at the very end.

Sources: Brookmeyer and Crowley 1982 (quantiles); Irwin 1949 and Royston and Parmar 2013 (restricted mean);
Garwood 1936 (interval of a Poisson rate); Hall and Wellner 1980 and Nair 1984 (bands).
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from decimal import Context, Decimal, localcontext
from fractions import Fraction

from spellcurve import exact
from spellcurve.exact import CurveRow, Spell

OBSERVED, BEYOND_FOLLOW_UP, TOO_FEW_AT_RISK = "observed", "beyond_follow_up", "too_few_at_risk"
REACHED, NOT_REACHED, NONE_SURVIVED = "reached", "not_reached", "none_survived"

#: A level counts as reached within this relative distance.
LEVEL_TOLERANCE = Fraction(1, 10**9)


@dataclass(frozen=True)
class SurvivalAt:
    """Survival at a duration; figures None unless status is OBSERVED."""

    duration: int
    survival: Fraction | None
    survival_lower: float | None
    survival_upper: float | None
    at_risk: Fraction | None
    status: str


@dataclass(frozen=True)
class Quantile:
    """First duration at which a share has had the event, with its limits; None where not reached."""

    share: float
    duration: int | None
    duration_lower: int | None
    duration_upper: int | None
    status: str


@dataclass(frozen=True)
class RestrictedMean:
    """Expected time up to a horizon, in units after ``survived``; figures None unless status is OBSERVED."""

    horizon: int
    restricted_mean: Fraction | None
    std_error: float | None
    restricted_mean_lower: float | None
    restricted_mean_upper: float | None
    status: str


def survival_at(rows: Sequence[CurveRow], duration: int) -> SurvivalAt:
    """Read survival at a duration off the rows of one group.

    Args:
        rows: the group's rows by duration, the first at 0.
        duration: whole units.
    """
    row, following = _in_force(rows, duration)
    status = _status(rows, duration)
    at_risk = None
    if status != BEYOND_FOLLOW_UP:
        at_risk = _at_risk(row, following, duration)
    if status != OBSERVED:
        return SurvivalAt(duration, None, None, None, at_risk, status)
    survival = _survival(rows, row)
    return SurvivalAt(duration, survival, row.survival_lower, row.survival_upper, at_risk, status)


def _in_force(rows: Sequence[CurveRow], duration: int) -> tuple[CurveRow, CurveRow | None]:
    """Find the last row that is not after the duration, and the row after that."""
    place = max(i for i, row in enumerate(rows) if row.duration <= duration)
    return rows[place], rows[place + 1] if place + 1 < len(rows) else None


def _ended_at(rows: Sequence[CurveRow]) -> float:
    """Find the duration from which survival is 0 for ever; infinite where it never is."""
    return min((row.duration for row in rows if row.survival == 0), default=math.inf)


def _survival(rows: Sequence[CurveRow], row: CurveRow) -> Fraction | None:
    if row.duration >= _ended_at(rows):
        return Fraction(0)
    return None if row.survival is None else Fraction(row.survival)


def _status(rows: Sequence[CurveRow], duration: int) -> str:
    row, following = _in_force(rows, duration)
    if _ended_at(rows) <= duration:
        return OBSERVED
    if following is None and duration > row.duration:
        return BEYOND_FOLLOW_UP
    # between two rows nobody had the event, and as many are at risk as at the later one
    counted = row if duration == row.duration else following
    hidden = row.survival is None or (counted is not None and _survival(rows, counted) is None)
    return TOO_FEW_AT_RISK if hidden else OBSERVED


def _at_risk(row: CurveRow, following: CurveRow | None, duration: int) -> Fraction | None:
    if duration == row.duration:
        return row.at_risk
    if following is not None:
        return following.at_risk
    if row.at_risk is None or row.events is None or row.censored is None:
        return None
    return Fraction(0) if row.events + row.censored >= row.at_risk else None


def survival_quantile(rows: Sequence[CurveRow], share: float) -> Quantile:
    """Find when a share of one group has had the event (Brookmeyer and Crowley 1982).

    Args:
        rows: as for ``survival_at``.
        share: between 0 and 1, taken as the decimal number that it is written as.
    """
    level = (1 - Fraction(str(share))) * (1 + LEVEL_TOLERANCE)
    reached, middle = _first_below(rows, "survival", level)
    limits = [_first_below(rows, name, level)[1] for name in exact.BOUNDS]
    status = NOT_REACHED if not reached else TOO_FEW_AT_RISK if middle is None else REACHED
    return Quantile(share, middle, limits[0], limits[1], status)


def _first_below(rows: Sequence[CurveRow], name: str, level: Fraction) -> tuple[bool, int | None]:
    """Say whether a figure gets to the level, and when; None where that may be at an earlier, hidden row."""
    previous: CurveRow | None = None
    for row in rows:
        figure = _survival(rows, row) if name == "survival" else getattr(row, name)
        if figure is not None and figure <= level:
            hidden = previous is not None and _survival(rows, previous) is None
            return True, None if hidden else row.duration
        previous = row
    return False, None


def restricted_mean(
    rows: Sequence[CurveRow], horizon: int, survived: int = 0, confidence: float = 0.95
) -> RestrictedMean:
    """Compute the expected time between ``survived`` and the horizon of those who survived so far.

    The variance is the sum of A² d / (n (n - d)) over the events in between, A being the area under the
    curve from the event to the horizon, divided by survival at ``survived``.

    Args:
        rows: as for ``survival_at``.
        horizon: whole units, above ``survived``.
        survived: whole units.
        confidence: level of the interval.
    """
    ended_at = _ended_at(rows)
    if ended_at <= survived:
        return RestrictedMean(horizon, None, None, None, None, NONE_SURVIVED)
    if rows[-1].duration < horizon and ended_at > rows[-1].duration:
        return RestrictedMean(horizon, None, None, None, None, BEYOND_FOLLOW_UP)
    if any(_status(rows, unit) != OBSERVED for unit in range(survived, horizon)):
        return RestrictedMean(horizon, None, None, None, None, TOO_FEW_AT_RISK)
    shares = [_survival(rows, _in_force(rows, unit)[0]) for unit in range(survived, horizon)]
    areas = [Fraction(0)]  # from each unit to the horizon, in the end from `survived` on
    for share in reversed(shares):
        assert share is not None
        areas.append(areas[-1] + share)
    areas.reverse()
    variance = Fraction(0)
    for row in rows:
        if survived < row.duration < min(horizon, ended_at) and row.events:
            n, d = row.at_risk, row.events
            assert n is not None
            variance += areas[row.duration - survived] ** 2 * d / (n * (n - d))
    base = shares[0]
    assert base
    mean = areas[0] / base
    with localcontext(Context(prec=60)):
        std_error = exact.to_decimal(variance).sqrt() / exact.to_decimal(base)
        reach = exact.normal_quantile(confidence) * std_error
        lower = max(Decimal(0), exact.to_decimal(mean) - reach)
        upper = min(Decimal(horizon - survived), exact.to_decimal(mean) + reach)
    return RestrictedMean(horizon, mean, float(std_error), float(lower), float(upper), OBSERVED)
