"""Differences of survival and of restricted means, trends, and events needed, in exact arithmetic.

Everything is written straight from its definition. What is rational is a ``fractions.Fraction``; roots,
logarithms and exponentials are worked out with 60 decimal digits and rounded to a float at the very end.
Only tails of the normal distribution are scipy's.

Sources: Greenwood 1926 and Klein, Logan, Harhoff and Andersen 2007 (survival at a duration); Irwin 1949 and
Royston and Parmar 2013 (restricted means); Tarone 1975 (trend); Schoenfeld 1981 (events needed); Rubinstein,
Gail and Santner 1981 and Lachin and Foulkes 1986 (events expected under a steady intake).
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from decimal import Context, Decimal, localcontext
from fractions import Fraction
from typing import Any

from scipy.stats import chi2, norm

from spellcurve import exact_readouts
from spellcurve.exact import INTERVAL_SCALES, CurveRow, Spell, normal_quantile, to_decimal
from spellcurve.exact_comparisons import by_stratum_and_group, compared_sums, hazard_ratio, sorted_groups

COMPARED, NO_STD_ERROR, REFERENCE_NOT_FOUND = "compared", "no_std_error", "reference_not_found"
GROUP_WITHOUT_SCORE, REACHED, NEVER_REACHED = "group_without_score", "reached", "never_reached"
SOONER, LATER, NEITHER = "sooner", "later", "neither"

_DIGITS = 60


@dataclass(frozen=True)
class Figure:
    """A figure of one group, with its variance if it has one, and what can be told of it."""

    value: Fraction | None
    variance: Fraction | None
    status: str


@dataclass(frozen=True)
class Difference:
    """A figure of a group beside that of the reference; None stands for null."""

    status: str
    figure_a: Fraction | None = None
    figure_b: Fraction | None = None
    difference: Fraction | None = None
    std_error: float | None = None
    difference_lower: float | None = None
    difference_upper: float | None = None
    p_value: float | None = None
    ratio: Fraction | None = None
    ratio_lower: float | None = None
    ratio_upper: float | None = None
    ratio_p_value: float | None = None


def survival_figure(rows: Sequence[CurveRow], duration: int) -> Figure:
    """Read survival and its Greenwood variance off the rows of one group.

    Args:
        rows: the group's rows by duration, as ``spellcurve.exact`` gives them.
        duration: whole units.
    """
    found = exact_readouts.survival_at(rows, duration)
    if not found.survival:
        return Figure(found.survival, None, found.status)
    in_force = max((row for row in rows if row.duration <= duration), key=lambda row: row.duration)
    assert in_force.greenwood_sum is not None
    return Figure(found.survival, found.survival**2 * in_force.greenwood_sum, found.status)


def mean_figure(rows: Sequence[CurveRow], horizon: int) -> Figure:
    """Compute the restricted mean and its variance: sum of A² d / (n (n - d)), A the area still to come.

    Args:
        rows: as for ``survival_figure``.
        horizon: whole units.
    """
    found = exact_readouts.restricted_mean(rows, horizon)
    if found.restricted_mean is None:
        return Figure(None, None, found.status)
    survival = [exact_readouts.survival_at(rows, unit).survival for unit in range(horizon)]
    variance = Fraction(0)
    for row in rows:
        n, d = row.at_risk, row.events
        if n and d and d < n and row.duration < horizon and survival[row.duration]:
            area = sum((share or Fraction(0) for share in survival[row.duration :]), Fraction(0))
            variance += area**2 * d / (n * (n - d))
    return Figure(found.restricted_mean, variance, found.status)


def difference(
    a: Figure, b: Figure | None, limit: int, confidence: float = 0.95, test_scale: str = "linear"
) -> Difference:
    """Compare a figure with that of the reference.

    Args:
        a: the group's figure.
        b: the reference's; None if there is no such group.
        limit: the largest difference there can be.
        confidence: of the intervals.
        test_scale: scale on which the p-value of the difference is computed, one of ``INTERVAL_SCALES``.

    Raises:
        ValueError: the scale is unknown.
    """
    if test_scale not in INTERVAL_SCALES:
        raise ValueError(f"test_scale is {test_scale!r}; give one of {', '.join(INTERVAL_SCALES)}.")
    if b is None:
        return Difference(REFERENCE_NOT_FOUND)
    for status in (exact_readouts.BEYOND_FOLLOW_UP, exact_readouts.TOO_FEW_AT_RISK):
        if status in (a.status, b.status):
            return Difference(status)
    assert a.value is not None and b.value is not None
    gap, ratio = a.value - b.value, a.value / b.value if b.value else None
    if a.variance is None or b.variance is None:
        return Difference(NO_STD_ERROR, a.value, b.value, gap, ratio=ratio)
    with localcontext(Context(prec=_DIGITS)):
        std_error = to_decimal(a.variance + b.variance).sqrt()
        reach = normal_quantile(confidence) * std_error
        lower = max(Decimal(-limit), to_decimal(gap) - reach)
        upper = min(Decimal(limit), to_decimal(gap) + reach)
        p_value = _p_value(a, b, test_scale)
        ratio_lower = ratio_upper = ratio_p_value = None
        if ratio:
            spread = (to_decimal(a.variance / a.value**2 + b.variance / b.value**2)).sqrt()
            factor = (normal_quantile(confidence) * spread).exp()
            ratio_lower, ratio_upper = float(to_decimal(ratio) / factor), float(to_decimal(ratio) * factor)
            ratio_p_value = _p_value(a, b, "log")
    return Difference(
        COMPARED,
        a.value,
        b.value,
        gap,
        float(std_error),
        float(lower),
        float(upper),
        p_value,
        ratio,
        ratio_lower,
        ratio_upper,
        ratio_p_value,
    )


def _p_value(a: Figure, b: Figure, scale: str) -> float | None:
    places = [_on_scale(figure, scale) for figure in (a, b)]
    if None in places:
        return None
    (x, u), (y, v) = (place for place in places if place is not None)
    if not u + v:
        return None
    return float(chi2.sf(float((x - y) ** 2 / (u + v)), 1))


def _on_scale(figure: Figure, scale: str) -> tuple[Decimal, Decimal] | None:
    """Return a figure and its variance on a scale, by the delta method; None where it has no place there."""
    assert figure.value is not None and figure.variance is not None
    s, variance = to_decimal(figure.value), to_decimal(figure.variance)
    if scale == "linear":
        return s, variance
    if not s or (scale != "log" and s == 1):
        return None
    relative = variance / s**2
    if scale == "log":
        return s.ln(), relative
    if scale == "log-log":
        return (-s.ln()).ln(), relative / s.ln() ** 2
    if scale == "logit":
        return (s / (1 - s)).ln(), relative / (1 - s) ** 2
    return _arcsine(s.sqrt()), relative * s / (1 - s) / 4


def _arcsine(x: Decimal) -> Decimal:
    """Invert the sine, by Newton's steps on the series of sine and cosine."""
    angle = Decimal(math.asin(float(x)))
    for _ in range(5):
        sine, cosine, term, k = Decimal(0), Decimal(1), Decimal(1), 0
        while abs(term) > Decimal(10) ** -(_DIGITS + 5):
            k += 1
            term = term * angle / k
            if k % 2:
                sine += -term if k % 4 == 3 else term
            else:
                cosine += -term if k % 4 == 2 else term
        angle += (x - sine) / cosine
    return angle


@dataclass(frozen=True)
class Trend:
    """What ``trend_test`` says; None stands for null."""

    status: str
    group_count: int
    z: float | None = None
    statistic: Fraction | None = None
    p_value: float | None = None
    direction: str | None = None
    hazard_ratio: float | None = None
    hazard_ratio_lower: float | None = None
    hazard_ratio_upper: float | None = None


def trend_test(
    spells: Iterable[Spell],
    scores: Mapping[Any, Fraction | int],
    weighting: str = "log-rank",
    confidence: float = 0.95,
) -> Trend | None:
    """Test whether events come sooner or later along the scores of the groups (Tarone 1975).

    Args:
        spells: the first value of each one's ``group`` is the group, the others are its stratum.
        scores: of the groups.
        weighting: as in ``exact_comparisons``.
        confidence: of the interval of the hazard ratio for one more of score.

    Returns:
        the trend; None without spells.
    """
    strata = by_stratum_and_group(spells)
    values = sorted_groups({group for own in strata.values() for group in own})
    if not values:
        return None
    if len(values) == 1:
        return Trend("one_group", 1)
    if any(value not in scores for value in values):
        return Trend(GROUP_WITHOUT_SCORE, len(values))
    sums = compared_sums(strata, values, weighting)
    if not sum(sums.observed):
        return Trend("no_events", len(values))
    own = [Fraction(scores[value]) for value in values]

    def along(of: Any) -> tuple[Fraction, Fraction]:
        excess = sum((s * u for s, u in zip(own, of.scores, strict=True)), Fraction(0))
        variance = sum(
            (own[i] * own[j] * of.covariance[i][j] for i in range(len(own)) for j in range(len(own))),
            Fraction(0),
        )
        return excess, variance

    excess, variance = along(sums)
    if not variance:
        return Trend("nothing_to_compare", len(values))
    statistic = excess**2 / variance
    with localcontext(Context(prec=_DIGITS)):
        z = float(to_decimal(statistic).sqrt()) * (-1 if excess < 0 else 1)
    ratio = hazard_ratio(*along(compared_sums(strata, values, "log-rank")), confidence)
    direction = SOONER if excess > 0 else LATER if excess < 0 else NEITHER
    return Trend(COMPARED, len(values), z, statistic, float(chi2.sf(float(statistic), 1)), direction, *ratio)


def events_needed(
    hazard_ratio: float, power: float = 0.8, alpha: float = 0.05, allocation: float = 0.5, sides: int = 2
) -> float:
    """Return how many events let a log-rank test find a hazard ratio (Schoenfeld 1981), not rounded.

    Args:
        hazard_ratio: above 0, not 1.
        power: probability of finding it.
        alpha: probability of finding one where there is none.
        allocation: share of one of the two groups.
        sides: 1 or 2.
    """
    reach = norm.isf(alpha / sides) + norm.ppf(power)
    return float(reach**2 / (allocation * (1 - allocation) * math.log(hazard_ratio) ** 2))


@dataclass(frozen=True)
class Time:
    """How long a comparison runs to see its events; None stands for null."""

    events_needed: int
    hazard: Fraction | None
    intake: Fraction | None
    duration: int | None
    spells_needed: Fraction | None
    status: str


def time_to_events_needed(
    spells: Sequence[Spell],
    needed: float,
    hazard_ratio: float,
    intake: Fraction | None,
    allocation: float = 0.5,
    intake_lasts: int | None = None,
    longest: int = 3650,
) -> Time:
    """Find the first whole unit by which as many events are expected as are needed.

    Args:
        spells: of one group; their hazard is events over the units at risk.
        needed: events, not rounded.
        hazard_ratio: what the allocated share's hazard is multiplied by.
        intake: spells that begin in a unit; None or 0 if none do.
        allocation: that share.
        intake_lasts: units for which spells are taken in; None for as long as the comparison runs.
        longest: last unit looked at.
    """
    events = sum((Fraction(s.weight) for s in spells if s.event and s.counts), Fraction(0))
    at_risk = sum((Fraction(s.weight) * (s.duration - s.entry) for s in spells), Fraction(0))
    whole = math.ceil(needed)
    hazard = events / at_risk if at_risk else None
    if hazard is None:
        return Time(whole, None, intake, None, None, "no_time_at_risk")
    if not hazard:
        return Time(whole, hazard, intake, None, None, "no_events")
    if not intake:
        return Time(whole, hazard, intake, None, None, "no_intake")
    with localcontext(Context(prec=_DIGITS)):
        share = Decimal(repr(allocation))
        arms = [
            (share, to_decimal(hazard) * Decimal(repr(hazard_ratio))),
            (1 - share, to_decimal(hazard)),
        ]
        for duration in range(1, longest + 1):
            taking_in = duration if intake_lasts is None else min(duration, intake_lasts)
            expected = to_decimal(intake) * sum(
                part * (taking_in - ((-h * (duration - taking_in)).exp() - (-h * duration).exp()) / h)
                for part, h in arms
            )
            if expected >= whole * (1 - Decimal(10) ** -9):
                return Time(whole, hazard, intake, duration, intake * taking_in, REACHED)
    if intake_lasts is not None and intake * intake_lasts <= whole:
        return Time(whole, hazard, intake, None, None, NEVER_REACHED)
    return Time(whole, hazard, intake, None, None, "not_within_longest")
