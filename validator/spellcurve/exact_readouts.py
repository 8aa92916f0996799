"""Read-outs of a survival curve in exact rational arithmetic, straight from their definitions.

They read the rows of one group as ``spellcurve.exact`` gives them, on either grid, blanked out below
``minimum_at_risk`` or not. What is rational is a ``fractions.Fraction``; roots, logarithms and normal
quantiles are worked out with 60 decimal digits and rounded to a float at the very end.

Sources: Brookmeyer and Crowley 1982 (quantiles); Irwin 1949 and Royston and Parmar 2013 (restricted mean);
Garwood 1936 (interval of a Poisson rate); Hall and Wellner 1980 and Nair 1984 (bands).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from decimal import Context, Decimal, localcontext
from fractions import Fraction

import numpy as np
from scipy.stats import chi2

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
    """Compute the expected time up to the horizon: of all, or from ``survived`` on of those who got there.

    The variance is the sum of A² d / (n (n - d)) over the events in between, A being the area under the
    curve from the event to the horizon; mean and root are divided by survival at ``survived``. With
    ``survived`` 0 nothing is divided, and events at 0 count: it is the mean of all who began.

    Args:
        rows: as for ``survival_at``.
        horizon: whole units, above ``survived``.
        survived: whole units.
        confidence: level of the interval.
    """
    ended_at = _ended_at(rows)
    if survived and ended_at <= survived:
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
        after = survived < row.duration or not survived
        if after and row.duration < min(horizon, ended_at) and row.events:
            n, d = row.at_risk, row.events
            assert n is not None
            variance += areas[row.duration - survived] ** 2 * d / (n * (n - d))
    base = shares[0] if survived else Fraction(1)
    assert base
    mean = areas[0] / base
    with localcontext(Context(prec=60)):
        std_error = exact.to_decimal(variance).sqrt() / exact.to_decimal(base)
        reach = exact.normal_quantile(confidence) * std_error
        lower = max(Decimal(0), exact.to_decimal(mean) - reach)
        upper = min(Decimal(horizon - survived), exact.to_decimal(mean) + reach)
    return RestrictedMean(horizon, mean, float(std_error), float(lower), float(upper), OBSERVED)


@dataclass(frozen=True)
class ConditionalSurvival:
    """Survival at a duration of those who survived so far; figures None unless status is OBSERVED."""

    survived: int
    duration: int
    at_risk: Fraction | None
    survival: Fraction | None
    std_error: float | None
    survival_lower: float | None
    survival_upper: float | None
    expected_time: Fraction | None
    status: str


def survival_beyond(
    rows: Sequence[CurveRow], survived: int, confidence: float = 0.95, interval_scale: str = "log-log"
) -> list[ConditionalSurvival]:
    """Compute survival from a duration on, of those who survived until then.

    The relative variance is Greenwood's sum over the events in between. ``expected_time`` is the expected
    time between ``survived`` and the row's duration; None if some row in between is blanked out.

    Args:
        rows: as for ``survival_at``.
        survived: whole units.
        confidence: level of the pointwise interval.
        interval_scale: one of ``exact.INTERVAL_SCALES``.

    Returns:
        a row at ``survived`` and one for each later row; one with a status alone if there is no telling.
    """
    row, following = _in_force(rows, survived)
    status = NONE_SURVIVED if _ended_at(rows) <= survived else _status(rows, survived)
    if status != OBSERVED:
        hidden = status == TOO_FEW_AT_RISK
        at_risk = _at_risk(row, following, survived) if hidden else None
        return [ConditionalSurvival(survived, survived, at_risk, None, None, None, None, None, status)]
    base = _survival(rows, row)
    assert base
    found = []
    variance, time, until = Fraction(0), Fraction(0), survived
    told = True  # whether survival is known all the way from `survived` on
    last = row
    for one in [row, *(later for later in rows if later.duration > survived)]:
        duration = max(one.duration, survived)
        if one is not row:
            variance += _greenwood_step(one)
            told = told and all(_status(rows, unit) == OBSERVED for unit in _first_and_next(until, duration))
            time += (_survival(rows, last) or Fraction(0)) * (duration - until)
            last, until = one, duration
        at_risk = _at_risk(row, following, survived) if one is row else one.at_risk
        survival = _survival(rows, one)
        if survival is None:
            nothing = (None,) * 5
            found.append(ConditionalSurvival(survived, duration, at_risk, *nothing, TOO_FEW_AT_RISK))
            continue
        share = survival / base
        std_error: float | None = None
        bounds: tuple[float | None, float | None] = (None, None)
        with localcontext(Context(prec=60)):
            if share:
                std_error = float(exact.to_decimal(share) * exact.to_decimal(variance).sqrt())
                bounds = exact._interval(share, variance, confidence, interval_scale)
        expected = time / base if told else None
        found.append(
            ConditionalSurvival(survived, duration, at_risk, share, std_error, *bounds, expected, OBSERVED)
        )
    return found


def _first_and_next(start: int, end: int) -> range:
    """The units from a row up to the next: all between two rows have one status, so two will do."""
    return range(start, min(start + 2, end))


def _greenwood_step(row: CurveRow) -> Fraction:
    """What a row's events add to Greenwood's sum: d / (n (n - d)), and nothing where they leave nobody."""
    if not row.events:
        return Fraction(0)
    assert row.at_risk is not None
    left = row.at_risk - row.events
    return row.events / (row.at_risk * left) if left else Fraction(0)


@dataclass(frozen=True)
class Band:
    """Events per unit at risk after ``from_duration``, up to ``to_duration``; the first has 0 as well."""

    from_duration: int
    to_duration: int
    events: Fraction
    time_at_risk: Fraction
    hazard: Fraction | None
    hazard_lower: float | None
    hazard_upper: float | None
    status: str


def hazard_by_band(
    spells: Iterable[Spell], width: int, confidence: float = 0.95, horizon: int | None = None
) -> list[Band]:
    """Compute the event rate of one group in bands.

    A spell is one unit at risk for each whole u with entry < u <= duration.

    Args:
        spells: spells of one group.
        width: of a band, in units.
        confidence: level of the exact interval of the rate (Garwood 1936).
        horizon: last duration that counts.

    Returns:
        bands by duration, up to the end of follow-up.
    """
    counted = [spell for spell in spells if spell.counts]
    last = max((spell.duration for spell in counted), default=0)
    if horizon is not None:
        last = min(last, horizon)
    bands = []
    for start in range(0, max(last, 1), width):
        end = start + width if horizon is None else min(start + width, horizon)
        events = time_at_risk = Fraction(0)
        for spell in counted:
            first, final = max(spell.entry, start), min(spell.duration, end, last)
            time_at_risk += Fraction(spell.weight) * max(0, final - first)
            if spell.event and (start < spell.duration <= end or spell.duration == start == 0):
                events += Fraction(spell.weight)
        hazard = events / time_at_risk if time_at_risk else None
        limits: tuple[float | None, float | None] = (None, None)
        if time_at_risk and events.denominator == 1:
            lower, upper = poisson_limits(int(events), confidence)
            limits = lower / float(time_at_risk), upper / float(time_at_risk)
        status = OBSERVED if time_at_risk else "no_time_at_risk"
        bands.append(Band(start, end, events, time_at_risk, hazard, *limits, status))
    return bands


_MOST_SUMMED = 2_000


def poisson_limits(events: int, confidence: float) -> tuple[float, float]:
    """Find the exact limits of a Poisson mean: each leaves (1 - confidence) / 2 to the counts beyond.

    The lower is 0 for no events. Bisection on sums of Poisson probabilities in 40 decimal digits, the sums
    taken outwards from ``events`` until they stop mattering. For more events than ``_MOST_SUMMED``, whose
    sums are long, Newton steps from scipy's quantiles of the chi-square distribution (good to 1e-9 there), on
    sums in floats: their rounding moves a limit by less than 1e-15 of itself.
    """
    with localcontext(Context(prec=40)):
        share = (1 - Decimal(repr(confidence))) / 2
        if events > _MOST_SUMMED:
            return _limit_of_many(events, share, -1), _limit_of_many(events, share, 1)
        far = Decimal(40) * (Decimal(events + 1).sqrt() + 4)
        lower = Decimal(0)
        if events:
            # at least `events` happen: P(events) (1 + m/(e+1) + m²/((e+1)(e+2)) + …)
            lower = _solve(
                lambda m: share - _poisson(m, events) * _upwards(m, events), Decimal(0), Decimal(events)
            )
        # at most `events` happen: P(events) (1 + e/m + e(e-1)/m² + …)
        upper = _solve(
            lambda m: _poisson(m, events) * _downwards(m, events) - share,
            Decimal(events) + share,
            events + far,
        )
        return float(lower), float(upper)


def _limit_of_many(events: int, share: Decimal, side: int) -> float:
    tail = float(share)
    limit = Decimal(float(chi2.isf(tail, 2 * events + 2) if side > 0 else chi2.ppf(tail, 2 * events)) / 2)
    for _ in range(3):
        outwards = _sum_of_ratios(float(limit), events, side)
        chance = _poisson(limit, events) * Decimal(outwards)
        # ln(chance) falls with the mean by P(events) / chance, or grows by P(events - 1) / chance
        slope = -1 / outwards if side > 0 else events / float(limit) / outwards
        limit -= (chance / share).ln() / Decimal(slope)
    return float(limit)


def _sum_of_ratios(mean: float, events: int, side: int) -> float:
    """The Poisson probabilities from ``events`` down (side 1) or up (side -1), over that of ``events``."""
    total, last, start, length = 1.0, 1.0, 0, 1 << 16
    while last > total * 1e-20:
        steps = start + np.arange(length, dtype=float)
        ratios = np.maximum(events - steps, 0) / mean if side > 0 else mean / (events + 1 + steps)
        terms = last * np.cumprod(ratios)
        total, last, start = total + float(np.sum(terms)), float(terms[-1]), start + length
    return total


def _poisson(mean: Decimal, count: int) -> Decimal:
    """P(count) for a Poisson mean; the factorial from Stirling's series where it would be long."""
    if count < 60:
        return (-mean).exp() * mean**count / math.factorial(count)
    n = Decimal(count)
    series = 1 / (12 * n) - 1 / (360 * n**3) + 1 / (1260 * n**5) - 1 / (1680 * n**7) + 1 / (1188 * n**9)
    return (n * (mean / n).ln() + n - mean - series).exp() / (2 * exact._PI * n).sqrt()


def _upwards(mean: Decimal, count: int) -> Decimal:
    total = term = Decimal(1)
    while term > total * Decimal(10) ** -20:
        count += 1
        term *= mean / count
        total += term
    return total


def _downwards(mean: Decimal, count: int) -> Decimal:
    total = term = Decimal(1)
    while count and term > total * Decimal(10) ** -20:
        term *= count / mean
        total += term
        count -= 1
    return total


def _solve(falls: Callable[[Decimal], Decimal], low: Decimal, high: Decimal) -> Decimal:
    """Find where a function that falls from above 0 to below 0 is 0, by the Illinois form of regula falsi."""
    low = max(low, high * Decimal(10) ** -30)
    at_low, at_high = falls(low), falls(high)
    for _ in range(200):
        middle = (low * at_high - high * at_low) / (at_high - at_low)
        if abs(high - low) < high * Decimal(10) ** -16 or middle in (low, high):
            break
        value = falls(middle)
        if value == 0:
            return middle
        if (value > 0) == (at_low > 0):
            low, at_low, at_high = middle, value, at_high / 2
        else:
            high, at_high, at_low = middle, value, at_low / 2
    return middle


def equal_precision_critical_value(variance_ratio: Fraction | float, confidence: float) -> float:
    """Find the multiple of the standard error that a band of equal precision takes (Nair 1984).

    It solves 4 φ(x) / x + φ(x) (x - 1 / x) ln(variance_ratio) = 1 - confidence, an approximation for small
    chances (Miller and Siegmund 1982); the ratio is Greenwood's sum at the last event to that at the first.
    """
    spread = math.log(variance_ratio)

    def excess(x: float) -> float:
        density = math.exp(-x * x / 2) / math.sqrt(2 * math.pi)
        return density * (4 / x + (x - 1 / x) * spread) - (1 - confidence)

    return _bisect(excess, 1.3, 20.0)


def hall_wellner_critical_value(last: float, confidence: float) -> float:
    """Find what the absolute Brownian bridge stays below from 0 to ``last`` with the given probability."""
    return _bisect(lambda x: _bridge_crosses(x, last) - (1 - confidence), 0.9 * math.sqrt(last), 20.0)


def _bridge_crosses(x: float, last: float) -> float:
    """Sum over reflections (Hall and Wellner 1980) the chance that the absolute bridge reaches x."""
    scale = math.sqrt(last * (1 - last))
    crossing = math.erfc(x / scale / math.sqrt(2))
    for k in range(1, 9):
        near, far = (2 * k * x * (1 - last) - x) / scale, (2 * k * x * (1 - last) + x) / scale
        between = (math.erfc(near / math.sqrt(2)) - math.erfc(far / math.sqrt(2))) / 2
        crossing -= 2 * (-1) ** k * math.exp(-2 * k * k * x * x) * between
    return crossing


def _bisect(falls: Callable[[float], float], low: float, high: float) -> float:
    for _ in range(200):
        middle = (low + high) / 2
        low, high = (middle, high) if falls(middle) > 0 else (low, middle)
    return (low + high) / 2


def band_reaches(
    rows: Sequence[CurveRow], kind: str, confidence: float = 0.95, horizon: int | None = None
) -> list[float | None]:
    """Compute what each row's band takes for z times std_error / survival; None where survival is 0 or 1.

    Args:
        rows: one group's rows of the whole curve (no horizon), with their Greenwood sums.
        kind: ``equal-precision`` or ``hall-wellner``.
        confidence: with which the band holds between the first and the last event.
        horizon: the last duration for which it has to hold; None for the last event.
    """
    sums = [
        row.greenwood_sum
        for row in rows
        if row.greenwood_sum and (horizon is None or row.duration <= horizon)
    ]
    if not sums:
        return [None] * len(rows)
    spells = sum((row.events or 0) + (row.censored or 0) for row in rows)
    if kind == "equal-precision":
        critical = equal_precision_critical_value(max(sums) / min(sums), confidence)
        return [critical * math.sqrt(row.greenwood_sum) if row.greenwood_sum else None for row in rows]
    scaled = float(spells * max(sums))
    critical = hall_wellner_critical_value(scaled / (1 + scaled), confidence)
    return [
        critical * (1 + float(spells * row.greenwood_sum)) / math.sqrt(spells) if row.greenwood_sum else None
        for row in rows
    ]
