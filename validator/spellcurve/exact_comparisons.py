"""The log-rank family of tests in exact rational arithmetic, written straight from its definitions.

Scores, covariances and statistics are ``fractions.Fraction``. Weights that are roots or broken powers are
worked out with 60 decimal digits first, and are exact from there on. Only tails, hazard ratios and what is
made of them are floats.

Sources: Mantel 1966 (log-rank, strata); Gehan 1965; Tarone and Ware 1977; Peto and Peto 1972, also as
modified by Andersen 1982; Fleming and Harrington 1981 (weightings); Yusuf and others 1985 (one-step hazard
ratio); Holm 1979; Benjamini and Hochberg 1995 (adjusted p-values).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Hashable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from decimal import Context, Decimal, localcontext
from fractions import Fraction
from itertools import combinations
from typing import Any

from scipy.stats import chi2

from spellcurve.exact import Spell, _at_risk_counter, normal_quantile, to_decimal
from spellcurve.exact_incidence import quadratic_form, rounded

WEIGHTINGS = ("log-rank", "gehan", "tarone-ware", "peto", "modified-peto", "fleming-harrington(p, q)")
PAIRS = ("none", "all", "reference")
ADJUSTMENTS = ("none", "bonferroni", "holm", "benjamini-hochberg")

COMPARED, FEWER_DEGREES = "compared", "fewer_degrees_of_freedom"
NOTHING_TO_COMPARE, NO_EVENTS, ONE_GROUP = "nothing_to_compare", "no_events", "one_group"
TOO_MANY_GROUPS, REFERENCE_NOT_FOUND = "too_many_groups", "reference_not_found"

ALL_GROUPS = "all groups"
_DIGITS = 60
_LARGEST_LOG = 700
_SMALLEST_TAIL = 1e-307


@dataclass(frozen=True)
class Moment:
    """One duration of one stratum at which somebody has the event: at risk and events, group by group."""

    duration: int
    at_risk: tuple[Fraction, ...]
    events: tuple[Fraction, ...]

    @property
    def n(self) -> Fraction:
        """At risk in all groups."""
        return sum(self.at_risk, Fraction(0))

    @property
    def d(self) -> Fraction:
        """Events in all groups."""
        return sum(self.events, Fraction(0))


@dataclass(frozen=True)
class Sums:
    """What a comparison is made of, all strata together: figures of the groups, in their order.

    Observed and expected events are counts; scores and covariance carry the weighting.
    """

    observed: tuple[Fraction, ...]
    expected: tuple[Fraction, ...]
    scores: tuple[Fraction, ...]
    covariance: tuple[tuple[Fraction, ...], ...]

    @property
    def statistic_and_rank(self) -> tuple[Fraction, int]:
        """Chi-square, and its degrees of freedom."""
        return quadratic_form(self.scores, self.covariance)


@dataclass(frozen=True)
class ComparedRow:
    """One row of ``log_rank_test``; None stands for null."""

    comparison: str
    group_a: str | None
    group_b: str | None
    weighting: str
    status: str
    statistic: Fraction | None = None
    degrees_of_freedom: int | None = None
    p_value: float | None = None
    p_value_adjusted: float | None = None
    observed_a: Fraction | None = None
    expected_a: Fraction | None = None
    observed_b: Fraction | None = None
    expected_b: Fraction | None = None
    hazard_ratio: float | None = None
    hazard_ratio_lower: float | None = None
    hazard_ratio_upper: float | None = None


def log_rank_test(
    spells: Iterable[Spell],
    weighting: str = "log-rank",
    pairs: str = "none",
    reference: Any = None,
    adjustment: str = "holm",
    confidence: float = 0.95,
    most_groups: int = 50,
    label: Callable[[Any], str] = str,
    digits: int | None = None,
) -> list[ComparedRow]:
    """Compare groups of spells.

    Args:
        spells: the first value of each one's ``group`` is the group compared, the others are its stratum.
        weighting: one of ``WEIGHTINGS``, with numbers in place of p and q.
        pairs: one of ``PAIRS``.
        reference: group that pairs are made with, if ``pairs`` is ``reference``.
        adjustment: of the p-values of pairs, one of ``ADJUSTMENTS``.
        confidence: of the intervals of hazard ratios.
        most_groups: with more, nothing is compared.
        label: the text of a group's value as the warehouse writes it.
        digits: with it, products are rounded to so many significant ones, for long courses.

    Returns:
        the row of all groups, then those of pairs; none without spells.

    Raises:
        ValueError: an option is unknown.
    """
    _check_choice("pairs", pairs, PAIRS)
    _check_choice("adjustment", adjustment, ADJUSTMENTS)
    parse_weighting(weighting)
    strata = by_stratum_and_group(spells)
    values = sorted_groups({group for own in strata.values() for group in own})
    if not values:
        return []
    names = {value: None if value is None else label(value) for value in values}
    if len(values) > most_groups:
        return [ComparedRow(ALL_GROUPS, None, None, weighting, TOO_MANY_GROUPS)]

    everyone = compared_sums(strata, values, weighting, digits)
    rows = [_judged(ComparedRow(ALL_GROUPS, None, None, weighting, ""), everyone)]
    if pairs == "reference" and reference not in values:
        rows += [
            ComparedRow(
                _versus(names[value], label(reference)),
                names[value],
                label(reference),
                weighting,
                REFERENCE_NOT_FOUND,
            )
            for value in values
        ]
        return rows
    if pairs == "none":
        return rows
    wanted: list[tuple[Any, Any]] = (
        list(combinations(values, 2))
        if pairs == "all"
        else [(value, reference) for value in values if value != reference]
    )
    tested = [_pair(strata, names, a, b, weighting, confidence, digits) for a, b in wanted]
    adjusted = adjusted_p_values([row.p_value for row in tested], adjustment)
    rows += [replace(row, p_value_adjusted=p) for row, p in zip(tested, adjusted, strict=True)]
    return rows


def _check_choice(option: str, given: str, allowed: Sequence[str]) -> None:
    if given not in allowed:
        raise ValueError(f"{option} is {given!r}; give one of {', '.join(allowed)}.")


def parse_weighting(weighting: str) -> tuple[str, Fraction, Fraction]:
    """Return the kind of a weighting and the powers p and q, which are 0 unless Fleming and Harrington's.

    Raises:
        ValueError: it is unknown.
    """
    if weighting in WEIGHTINGS[:-1]:
        return weighting, Fraction(0), Fraction(0)
    number = r"([0-9]+(?:\.[0-9]+)?)"
    found = re.fullmatch(rf"fleming-harrington\( *{number} *, *{number} *\)", weighting)
    if found is None:
        raise ValueError(f"weighting is {weighting!r}; give one of {', '.join(WEIGHTINGS)}.")
    return "fleming-harrington", Fraction(found[1]), Fraction(found[2])


def by_stratum_and_group(spells: Iterable[Spell]) -> dict[Hashable, dict[Any, list[Spell]]]:
    """Sort spells by the rest of their group values, and within it by the first."""
    strata: dict[Hashable, dict[Any, list[Spell]]] = {}
    for spell in spells:
        group, *stratum = spell.group
        strata.setdefault(tuple(stratum), {}).setdefault(group, []).append(spell)
    return strata


def sorted_groups(values: Iterable[Any]) -> list[Any]:
    """Return group values in their order, the group without a value last."""
    return sorted(values, key=lambda value: (value is None, 0 if value is None else value))


def moments(groups: Mapping[Any, Sequence[Spell]], values: Sequence[Any]) -> list[Moment]:
    """List the durations of one stratum at which anyone in the groups named has the event."""
    counters = [_at_risk_counter(groups.get(value, ())) for value in values]
    ends: list[dict[int, Fraction]] = [{} for _ in values]
    for own, value in zip(ends, values, strict=True):
        for spell in groups.get(value, ()):
            if spell.event and spell.counts:
                own[spell.duration] = own.get(spell.duration, Fraction(0)) + Fraction(spell.weight)
    return [
        Moment(
            t,
            tuple(at_risk(t) for at_risk in counters),
            tuple(own.get(t, Fraction(0)) for own in ends),
        )
        for t in sorted({t for own in ends for t in own})
    ]


def moment_weights(course: Sequence[Moment], weighting: str, digits: int | None = None) -> list[Fraction]:
    """Return the weight of each moment of a stratum; its survival is that of all groups together.

    ``peto`` takes the survival prod (1 - d / (n + 1)) up to and with the moment, ``modified-peto`` that times
    n / (n + 1), ``fleming-harrington(p, q)`` S^p (1 - S)^q with the product-limit S just before it.
    """
    kind, p, q = parse_weighting(weighting)
    survival, weights = Fraction(1), []
    for moment in course:
        n, d = moment.n, moment.d
        if kind == "log-rank":
            weight = Fraction(1)
        elif kind == "gehan":
            weight = n
        elif kind == "tarone-ware":
            weight = _power(n, Fraction(1, 2))
        elif kind == "fleming-harrington":
            weight = _power(survival, p) * _power(1 - survival, q)
            survival = rounded(survival * (1 - d / n), digits)
        else:
            survival = rounded(survival * (1 - d / (n + 1)), digits)
            weight = survival if kind == "peto" else survival * n / (n + 1)
        weights.append(weight)
    return weights


def _power(base: Fraction, exponent: Fraction) -> Fraction:
    """Raise to a power: exactly if it is whole, otherwise with 60 digits; anything to the power of 0 is 1."""
    if exponent.denominator == 1:
        return base**exponent.numerator
    if base == 0:
        return Fraction(0)
    with localcontext(Context(prec=_DIGITS)):
        return Fraction(to_decimal(base) ** to_decimal(exponent))


def compared_sums(
    strata: Mapping[Hashable, Mapping[Any, Sequence[Spell]]],
    values: Sequence[Any],
    weighting: str,
    digits: int | None = None,
) -> Sums:
    """Sum up observed minus expected events, and their covariance given the numbers at risk (Mantel 1966).

    A tie of d events among n takes the factor (n - d) / (n - 1) off the covariance; up to 1 event is no tie.
    A variance is the sum of the group's covariances with the others, its sign turned, so that rounding (with
    ``digits``) does not touch the rank.
    """
    size = len(values)
    observed, expected, scores = ([Fraction(0)] * size for _ in range(3))
    covariance = [[Fraction(0)] * size for _ in range(size)]
    for groups in strata.values():
        course = moments(groups, values)
        for moment, exact_weight in zip(course, moment_weights(course, weighting, digits), strict=True):
            n, d, weight = moment.n, moment.d, rounded(exact_weight, digits)
            share = [at_risk / n for at_risk in moment.at_risk]
            for i in range(size):
                excess = weight * (moment.events[i] - d * share[i])
                observed[i] += moment.events[i]
                expected[i] += rounded(d * share[i], digits)
                scores[i] += rounded(excess, digits)
            spread = weight**2 * (d * (n - d) / (n - 1) if d > 1 else d)
            for i, j in combinations([i for i in range(size) if share[i]], 2):
                link = rounded(spread * share[i] * share[j], digits)
                covariance[i][j] -= link
                covariance[j][i] -= link
                covariance[i][i] += link
                covariance[j][j] += link
    return Sums(tuple(observed), tuple(expected), tuple(scores), tuple(map(tuple, covariance)))


def _judged(row: ComparedRow, sums: Sums) -> ComparedRow:
    """Add the statistic, or why there is none."""
    statistic, rank = sums.statistic_and_rank
    full = len(sums.scores) - 1
    if full == 0:
        return replace(row, status=ONE_GROUP)
    if not sum(sums.observed):
        return replace(row, status=NO_EVENTS)
    if rank == 0:
        return replace(row, status=NOTHING_TO_COMPARE)
    return replace(
        row,
        status=COMPARED if rank == full else FEWER_DEGREES,
        statistic=statistic,
        degrees_of_freedom=rank,
        p_value=upper_tail(float(statistic), rank),
    )


def upper_tail(statistic: float, degrees_of_freedom: int) -> float:
    """Return the upper tail of chi-square; 0 below 1e-307, as the warehouse has it."""
    tail = float(chi2.sf(statistic, degrees_of_freedom))
    return tail if tail >= _SMALLEST_TAIL else 0.0


def _pair(
    strata: Mapping[Hashable, Mapping[Any, Sequence[Spell]]],
    names: Mapping[Any, str | None],
    a: Any,
    b: Any,
    weighting: str,
    confidence: float,
    digits: int | None,
) -> ComparedRow:
    """Compare two groups as if there were no others, and estimate the ratio of their hazards in one step."""
    unweighted = compared_sums(strata, (a, b), "log-rank", digits)
    ratio, lower, upper = hazard_ratio(
        unweighted.observed[0] - unweighted.expected[0], unweighted.covariance[0][0], confidence
    )
    row = ComparedRow(
        _versus(names[a], names[b]),
        names[a],
        names[b],
        weighting,
        "",
        observed_a=unweighted.observed[0],
        expected_a=unweighted.expected[0],
        observed_b=unweighted.observed[1],
        expected_b=unweighted.expected[1],
        hazard_ratio=ratio,
        hazard_ratio_lower=lower,
        hazard_ratio_upper=upper,
    )
    return _judged(row, compared_sums(strata, (a, b), weighting, digits))


def hazard_ratio(
    excess: Fraction, variance: Fraction, confidence: float
) -> tuple[float | None, float | None, float | None]:
    """Return exp((O - E) / V) and its limits exp((O - E) / V ∓ z / √V); nothing where V is 0.

    Exponents beyond 700 either way are taken for 700, as the warehouse does.
    """
    if not variance:
        return None, None, None
    with localcontext(Context(prec=_DIGITS)):
        middle = to_decimal(abs(excess / variance)) * (-1 if excess < 0 else 1)
        reach = normal_quantile(confidence) / to_decimal(variance).sqrt()
        low, mid, high = (_bounded_exp(middle + step * reach) for step in (-1, 0, 1))
    return mid, low, high


def _bounded_exp(exponent: Decimal) -> float:
    return float(max(Decimal(-_LARGEST_LOG), min(Decimal(_LARGEST_LOG), exponent)).exp())


def _versus(group_a: str | None, group_b: str | None) -> str:
    shown = ["null" if group is None else group for group in (group_a, group_b)]
    return " vs ".join(shown)


def adjusted_p_values(p_values: Sequence[float | None], adjustment: str) -> list[float | None]:
    """Adjust p-values for their number; those that are None are not counted and stay None.

    Bonferroni: m p. Holm: the largest of (m + 1 - k) p_k over the p-values up to it, by rank k. Benjamini
    and Hochberg: the smallest of m p_k / k over those from it on. None is above 1.
    """
    given = sorted((p, i) for i, p in enumerate(p_values) if p is not None)
    count, adjusted = len(given), list(p_values)
    for k, (p, i) in enumerate(given, start=1):
        if adjustment == "bonferroni":
            adjusted[i] = min(1.0, count * p)
        elif adjustment == "holm":
            adjusted[i] = min(1.0, max((count + 1 - j) * q for j, (q, _) in enumerate(given[:k], start=1)))
        elif adjustment == "benjamini-hochberg":
            adjusted[i] = min(1.0, min(count * q / j for j, (q, _) in enumerate(given, start=1) if j >= k))
        else:
            adjusted[i] = p
    return adjusted
