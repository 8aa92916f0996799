"""The survival curve in exact rational arithmetic: slow, obvious, and the measure of every other one.

Counts, hazards, survival, the cumulative hazard and both variances are ``fractions.Fraction``. Only what
needs a root, a logarithm or a normal quantile leaves the rationals: it is worked out with 60 decimal digits
and rounded to a float at the very end.

Sources: Kaplan and Meier 1958 (survival); Greenwood 1926 (its variance); Nelson 1972 and Aalen 1978
(cumulative hazard); Borgan and Liestøl 1990 (interval scales).
"""

from __future__ import annotations

import statistics
from bisect import bisect_left
from collections import defaultdict
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from decimal import Context, Decimal, localcontext
from fractions import Fraction
from functools import lru_cache
from itertools import accumulate
from typing import Any

INTERVAL_SCALES = ("linear", "log", "log-log", "logit", "arcsine")
GRIDS = ("steps", "every")
SMALL_COUNTS = ("keep", "hide")
WEIGHTS = ("whole", "fractional")
#: The options of a curve, as ``survival_curve`` takes them and a provenance line has them.
CURVE_OPTIONS = (
    "confidence",
    "interval_scale",
    "horizon",
    "grid",
    "minimum_at_risk",
    "small_counts",
    "weights",
)

_DIGITS = 60
_BITS = 256  # kept of each half of a fraction on its way to a Decimal: more than 60 digits
_PI = Decimal("3.14159265358979323846264338327950288419716939937510582097494459")


@dataclass(frozen=True)
class Spell:
    """One spell, or ``weight`` identical ones.

    Attributes:
        entry: tenure in whole units when observation began, 0 if watched from the start.
        duration: tenure in whole units when last seen, not below ``entry``.
        event: 1 if the spell ended by the event, 0 if it was censored.
        weight: how many spells this one stands for, above 0.
        cause: which kind of event it was; not used by the survival curve.
        group: values of the grouping columns.
    """

    entry: int
    duration: int
    event: int
    weight: int | Fraction = 1
    cause: str | None = None
    group: tuple[Any, ...] = ()

    def __post_init__(self) -> None:
        if not 0 <= self.entry <= self.duration:
            raise ValueError(f"{self} needs 0 <= entry <= duration; correct the spell.")
        if self.event not in (0, 1):
            raise ValueError(f"{self} has event {self.event!r}; give 0 or 1.")
        if not self.weight > 0:
            raise ValueError(f"{self} has weight {self.weight!r}; give a number above 0.")

    @property
    def counts(self) -> bool:
        """Whether the spell was ever at risk: one that enters at its own end, after 0, never was."""
        return self.entry < self.duration or self.duration == 0


@dataclass(frozen=True)
class CurveRow:
    """The curve of one group at one duration; None stands for null.

    ``greenwood_sum`` (sum of d / (n (n - d)), None from where survival is 0) and
    ``cumulative_hazard_variance`` (sum of d / n²) are the exact sums behind the standard errors; they are no
    columns of the published table.
    """

    group: tuple[Any, ...]
    duration: int
    at_risk: Fraction | None = None
    events: Fraction | None = None
    censored: Fraction | None = None
    hazard: Fraction | float | None = None
    survival: Fraction | float | None = None
    std_error: float | None = None
    survival_lower: float | None = None
    survival_upper: float | None = None
    cumulative_hazard: Fraction | float | None = None
    cumulative_hazard_std_error: float | None = None
    greenwood_sum: Fraction | None = None
    cumulative_hazard_variance: Fraction | None = None


COUNTS = ("at_risk", "events", "censored")
BOUNDS = ("survival_lower", "survival_upper")
ESTIMATES = (
    "hazard",
    "survival",
    "std_error",
    *BOUNDS,
    "cumulative_hazard",
    "cumulative_hazard_std_error",
)
FIGURES = (*COUNTS, *ESTIMATES)
_EXACT_SUMS = ("greenwood_sum", "cumulative_hazard_variance")


_NUMBERS = ("entry", "duration", "event", "weight")
#: An aggregate in SQL: the weight of spells together, but one that is null or not above 0 if there is such.
SUMMED_WEIGHT = (
    "case when count(weight) = count(*) and min(weight) > 0 then sum(weight) "
    "when count(weight) = count(*) then min(weight) end as weight"
)


def as_spell(row: Mapping[str, Any], group: tuple[Any, ...] = (), cause: str | None = None) -> Spell:
    """Make a spell of a row as a warehouse gives it, whatever types its numbers have.

    Args:
        row: ``entry``, ``duration``, ``event`` and ``weight`` of the spell.
        group: values of the grouping columns.
        cause: which kind of event it was.

    Raises:
        ValueError: the row is no sound spell.
    """
    numbers: dict[str, Any] = {}
    for name in _NUMBERS:
        try:
            number = Fraction(row[name])
        except (TypeError, ValueError, OverflowError):  # null, not a number, infinite
            number = None
        if number is None or (number.denominator > 1 and name != "weight"):
            shown = ", ".join(f"{one} {'null' if row[one] is None else row[one]}" for one in _NUMBERS)
            where = f" in the group {', '.join(map(str, group))}" if group else ""
            kind = "number" if name == "weight" else "whole number"
            raise ValueError(
                f"a spell of {shown}{where} needs a {kind} as {name}; "
                "correct it (the test spells_are_sound lists such spells)."
            )
        numbers[name] = int(number) if number.denominator == 1 else number
    return Spell(**numbers, cause=cause, group=group)


def check_durations(relation: str, rows: Iterable[Mapping[str, Any]]) -> None:
    """Make sure that each row of a table which a read-out reads has a duration.

    Raises:
        ValueError: one has none.
    """
    for row in rows:
        if row["duration"] is None:
            known = ", ".join(f"{name} {value}" for name, value in row.items() if value is not None)
            raise ValueError(
                f"{relation} has a row without a duration ({known}); give it one or leave it out."
            )


def group_spells(spells: Iterable[Spell]) -> dict[tuple[Any, ...], list[Spell]]:
    """Sort spells into their groups, in the order in which the groups first appear."""
    groups: dict[tuple[Any, ...], list[Spell]] = {}
    for spell in spells:
        groups.setdefault(spell.group, []).append(spell)
    return groups


def survival_curves(
    spells_by_group: Mapping[tuple[Any, ...], Iterable[Spell]], **options: Any
) -> dict[tuple[Any, ...], list[CurveRow]]:
    """Compute the curve of every group.

    Args:
        spells_by_group: group values to the spells of that group (see ``group_spells``).
        **options: as ``survival_curve`` takes them.

    Returns:
        group values to that group's rows, by duration.
    """
    curves = {}
    for group, spells in spells_by_group.items():
        own = [replace(spell, group=group) for spell in spells]
        curves[group] = survival_curve(own, **options)
    return curves


def survival_curve(
    spells: Iterable[Spell],
    confidence: float = 0.95,
    interval_scale: str = "log-log",
    horizon: int | None = None,
    grid: str = "steps",
    minimum_at_risk: float | Fraction = 0,
    small_counts: str = "keep",
    weights: str = "whole",
) -> list[CurveRow]:
    """Compute the survival curve of one group of spells.

    Args:
        spells: spells of one group; none gives no rows.
        confidence: level of the pointwise interval, between 0 and 1.
        interval_scale: one of ``INTERVAL_SCALES``.
        horizon: last duration to show; figures up to it stay those of the whole curve.
        grid: ``steps`` for rows at observed durations, ``every`` for a row at each unit.
        minimum_at_risk: below it the estimates of a row are None.
        small_counts: ``hide`` makes the counts of such a row None too.
        weights: ``whole`` makes a count that is not whole None; ``fractional`` keeps it.

    Returns:
        rows by duration, the first at 0.

    Raises:
        ValueError: an option is unknown, or the spells belong to more than one group.
    """
    check_options(confidence, interval_scale, horizon, grid, small_counts, weights)
    spells = list(spells)
    if not spells:
        return []
    shown = set(shown_durations(spells, grid, horizon))
    every_row = _figures(spells, shown)
    with localcontext(Context(prec=_DIGITS)):
        rows = [
            _with_uncertainty(row, confidence, interval_scale) for row in every_row if row.duration in shown
        ]
    return [as_published(row, minimum_at_risk, small_counts, weights) for row in rows]


def check_options(
    confidence: float, interval_scale: str, horizon: int | None, grid: str, small_counts: str, weights: str
) -> None:
    """Raise ValueError, in one sentence, for the first option that is not allowed."""
    if not 0 < confidence < 1:
        raise ValueError(f"confidence is {confidence!r}; give a number between 0 and 1.")
    if horizon is not None and horizon < 0:
        raise ValueError(f"horizon is {horizon!r}; give a whole number of units, 0 or more.")
    _check_choice("interval_scale", interval_scale, INTERVAL_SCALES)
    _check_choice("grid", grid, GRIDS)
    _check_choice("small_counts", small_counts, SMALL_COUNTS)
    _check_choice("weights", weights, WEIGHTS)


def _check_choice(option: str, given: str, allowed: Sequence[str]) -> None:
    if given not in allowed:
        raise ValueError(f"{option} is {given!r}; give one of {', '.join(allowed)}.")


def shown_durations(spells: Sequence[Spell], grid: str, horizon: int | None) -> list[int]:
    """List the durations that have a row: observed ones, 0, and the horizon if follow-up reaches it."""
    observed = {0} | {spell.duration for spell in spells if spell.counts}
    end_of_follow_up = max(observed)
    last = end_of_follow_up if horizon is None else min(horizon, end_of_follow_up)
    if grid == "every":
        return list(range(last + 1))
    if horizon is not None and horizon <= end_of_follow_up:
        observed.add(horizon)
    return sorted(duration for duration in observed if duration <= last)


def as_published(
    row: CurveRow, minimum_at_risk: float | Fraction, small_counts: str, weights: str
) -> CurveRow:
    """Blank out what the published table does not show: small groups, and counts that are not whole."""
    hidden: list[str] = []
    if row.at_risk is not None and row.at_risk < minimum_at_risk:
        hidden += [*ESTIMATES, *_EXACT_SUMS]
        if small_counts == "hide":
            hidden += COUNTS
    if weights == "whole":
        hidden += [name for name in COUNTS if not is_whole(getattr(row, name))]
    return replace(row, **dict.fromkeys(hidden)) if hidden else row  # type: ignore[arg-type]


def is_whole(number: Fraction | float | None) -> bool:
    """Say whether an exact number is an integer (None counts as one)."""
    return number is None or Fraction(number).denominator == 1


def _figures(spells: Sequence[Spell], extra_durations: Iterable[int]) -> list[CurveRow]:
    """Walk through the durations once and compute everything that is rational."""
    if len({spell.group for spell in spells}) > 1:
        raise ValueError(
            "The spells belong to several groups; sort them with group_spells, then use survival_curves."
        )
    at_risk_at = _at_risk_counter(spells)
    events, censored = _ends(spells)
    survival, hazard_sum, hazard_variance = Fraction(1), Fraction(0), Fraction(0)
    greenwood: Fraction | None = Fraction(0)
    rows = []
    for t in sorted({0} | events.keys() | censored.keys() | set(extra_durations)):
        n, d = at_risk_at(t), events.get(t, Fraction(0))
        hazard = d / n if n else Fraction(0)
        if d:
            survival *= 1 - hazard
            hazard_sum += hazard
            hazard_variance += d / n**2
            greenwood = None if survival == 0 or greenwood is None else greenwood + d / (n * (n - d))
        rows.append(
            CurveRow(
                group=spells[0].group,
                duration=t,
                at_risk=n,
                events=d,
                censored=censored.get(t, Fraction(0)),
                hazard=hazard,
                survival=survival,
                cumulative_hazard=hazard_sum,
                greenwood_sum=greenwood,
                cumulative_hazard_variance=hazard_variance,
            )
        )
    return rows


def _ends(spells: Sequence[Spell]) -> tuple[dict[int, Fraction], dict[int, Fraction]]:
    events: dict[int, Fraction] = defaultdict(Fraction)
    censored: dict[int, Fraction] = defaultdict(Fraction)
    for spell in spells:
        if spell.counts:
            (events if spell.event else censored)[spell.duration] += Fraction(spell.weight)
    return dict(events), dict(censored)


def _at_risk_counter(spells: Sequence[Spell]) -> Callable[[int], Fraction]:
    """Return a function of t: the weight with entry < t <= duration, and at t = 0 that with entry = 0."""
    entering: dict[int, Fraction] = defaultdict(Fraction)
    leaving: dict[int, Fraction] = defaultdict(Fraction)
    for spell in spells:
        if spell.counts:
            entering[spell.entry] += Fraction(spell.weight)
            leaving[spell.duration] += Fraction(spell.weight)
    entered_before, left_before = _running_total(entering), _running_total(leaving)

    def at_risk(t: int) -> Fraction:
        return entering.get(0, Fraction(0)) if t == 0 else entered_before(t) - left_before(t)

    return at_risk


def _running_total(amounts: Mapping[int, Fraction]) -> Callable[[int], Fraction]:
    """Return a function of t: the sum of the amounts whose key is below t."""
    keys = sorted(amounts)
    totals = list(accumulate((amounts[key] for key in keys), initial=Fraction(0)))
    return lambda t: totals[bisect_left(keys, t)]


def _with_uncertainty(row: CurveRow, confidence: float, interval_scale: str) -> CurveRow:
    """Add the standard errors and the interval, from the row's exact sums."""
    assert row.cumulative_hazard_variance is not None and isinstance(row.survival, Fraction)
    hazard_error = float(to_decimal(row.cumulative_hazard_variance).sqrt())
    if row.survival == 0 or row.greenwood_sum is None:
        return replace(row, cumulative_hazard_std_error=hazard_error)
    std_error = to_decimal(row.survival) * to_decimal(row.greenwood_sum).sqrt()
    lower, upper = _interval(row.survival, row.greenwood_sum, confidence, interval_scale)
    return replace(
        row,
        std_error=float(std_error),
        survival_lower=lower,
        survival_upper=upper,
        cumulative_hazard_std_error=hazard_error,
    )


def _interval(
    survival: Fraction, greenwood_sum: Fraction, confidence: float, interval_scale: str
) -> tuple[float, float]:
    """Compute the pointwise interval of a survival above 0 on the scale asked for, clipped to [0, 1]."""
    if survival == 1:
        return 1.0, 1.0
    s, failed = to_decimal(survival), to_decimal(1 - survival)
    reach = normal_quantile(confidence) * to_decimal(greenwood_sum).sqrt()
    if interval_scale == "linear":
        lower, upper = s - s * reach, s + s * reach
    elif interval_scale == "log":
        lower, upper = s * (-reach).exp(), s * reach.exp()
    elif interval_scale == "log-log":
        power = (reach / -s.ln()).exp()
        lower, upper = (power * s.ln()).exp(), (s.ln() / power).exp()
    elif interval_scale == "logit":
        odds = s / failed
        factor = (reach / failed).exp()
        lower, upper = odds / (odds + factor), odds * factor / (odds * factor + 1)
    else:
        lower, upper = _arcsine_interval(s, failed, reach * (s / failed).sqrt() / 2)
    return float(max(lower, Decimal(0))), float(min(upper, Decimal(1)))


def _arcsine_interval(s: Decimal, failed: Decimal, half_width: Decimal) -> tuple[Decimal, Decimal]:
    """Compute sin²(a - h) and sin²(a + h) for sin²(a) = s, with both angles kept within a quarter turn.

    No inverse sine is needed: sin²(a ± h) = (sin a cos h ± cos a sin h)².
    """
    if half_width >= _PI / 2:
        return Decimal(0), Decimal(1)
    sine, cosine = _sine_and_cosine(half_width)
    sin_a, cos_a = s.sqrt(), failed.sqrt()
    lower = Decimal(0) if sine >= sin_a else (sin_a * cosine - cos_a * sine) ** 2
    upper = Decimal(1) if sine >= cos_a else (sin_a * cosine + cos_a * sine) ** 2
    return lower, upper


def _sine_and_cosine(angle: Decimal) -> tuple[Decimal, Decimal]:
    """Sum both power series for an angle between 0 and a quarter turn."""
    sums = [Decimal(1), Decimal(0)]  # cosine, sine
    term, k = Decimal(1), 0
    while abs(term) > Decimal(10) ** -(_DIGITS + 5):
        k += 1
        term = term * angle / k
        sums[k % 2] += -term if k % 4 in (2, 3) else term
    return sums[1], sums[0]


def to_decimal(number: Fraction) -> Decimal:
    """Turn an exact number into a Decimal, right to the current precision up to 75 digits.

    Only the leading bits of numerator and denominator are divided, so that numbers of many thousand digits
    stay cheap.
    """
    top, bottom = number.numerator, number.denominator
    drop_top, drop_bottom = max(0, top.bit_length() - _BITS), max(0, bottom.bit_length() - _BITS)
    return Decimal(top >> drop_top) / Decimal(bottom >> drop_bottom) * Decimal(2) ** (drop_top - drop_bottom)


@lru_cache(maxsize=64)
def normal_quantile(confidence: float) -> Decimal:
    """Return the z for which a standard normal lies within ±z with the given probability, to 40 digits.

    Newton steps on the series P(|Z| < z) = 2 φ(z) Σ z^(2k+1) / (1·3·5···(2k+1)), whose terms are positive.
    """
    with localcontext(Context(prec=_DIGITS)):
        target = Decimal(repr(confidence))
        z = Decimal(statistics.NormalDist().inv_cdf((1 + confidence) / 2))
        for _ in range(5):
            density = (-z * z / 2).exp() / (2 * _PI).sqrt()
            z -= (2 * density * _positive_series(z) - target) / (2 * density)
        return +z


def _positive_series(z: Decimal) -> Decimal:
    total = term = z
    k = 0
    while term > total * Decimal(10) ** -(_DIGITS + 5):
        k += 1
        term *= z * z / (2 * k + 1)
        total += term
    return total
