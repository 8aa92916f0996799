"""Cumulative incidence, life table, mean count, state shares and Gray's test in exact rational arithmetic.

Everything is written straight from its definition, at whatever cost: a variance is the double sum that its
source prints. Roots, logarithms and normal quantiles are worked out with 60 decimal digits and rounded to a
float at the very end.

Numerators and denominators grow with every duration, and double sums with their square. For long tables the
functions therefore take ``digits``: sums are then kept to so many significant digits and, where a definition
is a sum over all pairs, multiplied out into running sums.

Sources: Aalen and Johansen 1978, with the variance of Marubini and Valsecchi 1995 (cumulative incidence);
Cutler and Ederer 1958 (life table); Nelson 1988 and Lawless and Nadeau 1995 (mean cumulative count);
Gray 1988 (comparison of incidences).
"""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections import Counter, defaultdict
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from decimal import Context, localcontext
from fractions import Fraction

from spellcurve.exact import (
    Spell,
    _at_risk_counter,
    _interval,
    shown_durations,
    to_decimal,
)

_DIGITS = 60


@dataclass(frozen=True)
class IncidenceRow:
    """The incidence of one cause at one duration; None stands for null. ``variance`` is the exact one."""

    cause: str
    duration: int
    at_risk: Fraction
    events: Fraction
    incidence: Fraction
    variance: Fraction | None
    std_error: float | None
    incidence_lower: float | None
    incidence_upper: float | None


def cumulative_incidence(
    spells: Sequence[Spell],
    causes: Mapping[str, str] | None = None,
    others: str = "competing",
    confidence: float = 0.95,
    interval_scale: str = "log-log",
    horizon: int | None = None,
    grid: str = "steps",
    digits: int | None = None,
) -> list[IncidenceRow]:
    """Compute the incidence of each cause for one group of spells.

    Args:
        spells: spells of one group; an event without a cause is of cause ``unknown``.
        causes: cause to label, for those that are wanted (several causes may share a label); None for every
            cause that an event at risk has.
        others: ``competing``, or ``censored`` to treat every other cause as censoring.
        confidence: as for ``exact.survival_curve``.
        interval_scale: as for ``exact.survival_curve``.
        horizon: as for ``exact.survival_curve``.
        grid: as for ``exact.survival_curve``.
        digits: see the module's description; None for all.

    Returns:
        rows by cause and duration.
    """
    if not spells:
        return []
    ends: dict[str | None, dict[int, Fraction]] = defaultdict(lambda: defaultdict(Fraction))
    for spell in spells:
        if spell.counts and spell.event:
            cause = "unknown" if spell.cause is None else spell.cause
            ends[cause if causes is None else causes.get(cause)][spell.duration] += Fraction(spell.weight)
    labels = [cause for cause in ends if cause is not None] if causes is None else [*causes.values()]
    all_ends: dict[int, Fraction] = defaultdict(Fraction)
    for by_duration in ends.values():
        for duration, count in by_duration.items():
            all_ends[duration] += count
    shown = shown_durations(spells, grid, horizon)
    rows = []
    for label in sorted(set(labels)):
        own = ends[label]
        competing = all_ends if others == "competing" else own
        rows += _incidence_rows(label, spells, own, competing, shown, confidence, interval_scale, digits)
    return rows


def _incidence_rows(
    label: str,
    spells: Sequence[Spell],
    own: Mapping[int, Fraction],
    all_ends: Mapping[int, Fraction],
    shown: Sequence[int],
    confidence: float,
    interval_scale: str,
    digits: int | None,
) -> list[IncidenceRow]:
    at_risk = _at_risk_counter(spells)
    steps = incidence_steps(at_risk, own, all_ends, digits)
    variances = running_variances(steps, digits) if digits else []
    complete = not any(step.survival_before and step.d > step.own for step in steps)
    rows = []
    for t in shown:
        reached = bisect_right(steps, t, key=lambda step: step.duration)
        incidence = steps[reached - 1].incidence if reached else Fraction(0)
        if complete and reached and not steps[reached - 1].survival:
            incidence = Fraction(1)  # rounded sums may just miss it
        variance: Fraction | None = Fraction(0)
        if incidence == 1:
            variance = None
        elif reached:
            variance = variances[reached - 1] if digits else incidence_variance(steps[:reached])
        std_error, lower, upper = share_uncertainty(incidence, variance, confidence, interval_scale)
        rows.append(
            IncidenceRow(
                label,
                t,
                at_risk(t),
                own.get(t, Fraction(0)),
                incidence,
                variance,
                std_error,
                lower,
                upper,
            )
        )
    return rows


@dataclass(frozen=True)
class IncidenceStep:
    """What happens at a duration with events: n at risk, d ended, own of them by the cause looked at."""

    duration: int
    n: Fraction
    d: Fraction
    own: Fraction
    survival_before: Fraction
    survival: Fraction
    incidence: Fraction


def incidence_steps(
    at_risk: Callable[[int], Fraction],
    own: Mapping[int, Fraction],
    all_ends: Mapping[int, Fraction],
    digits: int | None = None,
) -> list[IncidenceStep]:
    """Walk through the durations with events: Aalen and Johansen's estimate for one cause.

    With ``digits``, each product is rounded to so many significant ones, for long curves.
    """
    survival, incidence, steps = Fraction(1), Fraction(0), []
    for t in sorted(t for t, d in all_ends.items() if d):
        n, d, own_events = at_risk(t), all_ends[t], own.get(t, Fraction(0))
        before = survival
        incidence = rounded(incidence + before * own_events / n, digits)
        survival = rounded(survival * (1 - d / n), digits)
        steps.append(IncidenceStep(t, n, d, own_events, before, survival, incidence))
    return steps


def rounded(number: Fraction, digits: int | None) -> Fraction:
    """Keep so many significant digits, or all of them."""
    if digits is None or number == 0:
        return number
    keep = digits * 10 // 3
    shift = keep - number.numerator.bit_length() + number.denominator.bit_length()
    scale = Fraction(2) ** shift
    return round(number * scale) / scale


def incidence_variance(steps: Sequence[IncidenceStep], digits: int | None = None) -> Fraction:
    """Return the variance at the last of the steps: the three sums of Marubini and Valsecchi (1995).

    Where all at risk end, the difference in the first and third sum is 0 for ever after, and so are they.
    """
    total = Fraction(0)
    for step in steps:
        n, d, own, before = step.n, step.d, step.own, step.survival_before
        gained = steps[-1].incidence - step.incidence
        term = before**2 * own * (n - own) / n**3
        if gained:
            term += gained**2 * d / (n * (n - d)) - 2 * gained * before * own / n**2
        total = rounded(total + term, digits)
    return total


def running_variances(steps: Sequence[IncidenceStep], digits: int | None) -> list[Fraction]:
    """Return ``incidence_variance`` at every step, its squares multiplied out into running sums."""
    sums = [Fraction(0)] * 6
    variances = []
    for step in steps:
        n, d, own, before, incidence = step.n, step.d, step.own, step.survival_before, step.incidence
        greenwood = d / (n * (n - d)) if n > d else Fraction(0)
        mixed = before * own / n**2
        added = (
            greenwood,
            incidence * greenwood,
            incidence**2 * greenwood,
            before**2 * own * (n - own) / n**3,
            mixed,
            incidence * mixed,
        )
        sums = [rounded(total + term, digits) for total, term in zip(sums, added, strict=True)]
        g, ig, iig, a, b, ib = sums
        variances.append(
            rounded(incidence**2 * g - 2 * incidence * ig + iig + a - 2 * (incidence * b - ib), digits)
        )
    return variances


def share_uncertainty(
    share: Fraction, variance: Fraction | None, confidence: float, interval_scale: str
) -> tuple[float | None, float | None, float | None]:
    """Standard error and interval of a share: 0 and [0, 0] at a share of 0, nothing at a share of 1."""
    if share == 0:
        return 0.0, 0.0, 0.0
    if share == 1 or variance is None:
        return None, None, None
    with localcontext(Context(prec=_DIGITS)):
        relative = to_decimal(variance / share**2)
        error = float(to_decimal(share) * relative.sqrt())
        lower, upper = _interval(share, variance / share**2, confidence, interval_scale)
    return error, lower, upper


@dataclass(frozen=True)
class TableRow:
    """One band of a life table; ``greenwood_sum`` is the exact sum behind the standard error."""

    from_duration: int
    to_duration: int
    entering: Fraction
    censored: Fraction
    exposed: Fraction
    events: Fraction
    hazard_share: Fraction
    survival: Fraction
    greenwood_sum: Fraction
    std_error: float | None


def actuarial_table(spells: Sequence[Spell], width: int, horizon: int | None = None) -> list[TableRow]:
    """Compute the life table of one group in bands of ``width`` units (Cutler and Ederer 1958)."""
    if not spells:
        return []
    counted = [spell for spell in spells if spell.counts]
    last = max((spell.duration for spell in counted), default=0)
    survival, greenwood, rows = Fraction(1), Fraction(0), []
    for low in range(0, last + 1, width):
        high = low + width
        if horizon is not None and high > horizon:
            break
        entering = _weight(spell for spell in counted if spell.entry <= low <= spell.duration)
        late = _weight(spell for spell in counted if low < spell.entry < high)
        ending = [spell for spell in counted if low <= spell.duration < high]
        events, censored = _weight(s for s in ending if s.event), _weight(s for s in ending if not s.event)
        exposed = entering + late / 2 - censored / 2
        hazard = min(Fraction(1), events / exposed) if events else Fraction(0)
        survival *= 1 - hazard
        if 0 < hazard < 1:
            greenwood += hazard / (exposed - events)
        error = None
        if survival:
            with localcontext(Context(prec=_DIGITS)):
                error = float(to_decimal(survival) * to_decimal(greenwood).sqrt())
        rows.append(
            TableRow(low, high, entering, censored, exposed, events, hazard, survival, greenwood, error)
        )
    return rows


def _weight(spells: Iterable[Spell]) -> Fraction:
    return sum((Fraction(spell.weight) for spell in spells), Fraction(0))


@dataclass(frozen=True)
class Unit:
    """One subject, or ``weight`` identical ones: spells as (entry, duration), and the tenures of events."""

    spells: tuple[tuple[int, int], ...]
    events: tuple[int, ...]
    weight: int | Fraction = 1


@dataclass(frozen=True)
class CountRow:
    """The mean count of one group at one duration, with both variances exactly."""

    duration: int
    at_risk: Fraction
    events: Fraction
    mean_count: Fraction
    robust_variance: Fraction
    naive_variance: Fraction


def mean_cumulative_count(
    units: Sequence[Unit], horizon: int | None = None, grid: str = "steps", digits: int | None = None
) -> list[CountRow]:
    """Compute Nelson's mean cumulative count of one group; each event must be at risk in a spell of its unit.

    The robust variance is the sum over units of the square of the sum over u <= t of
    (events of the unit - its spells at risk * d/n) / n (Lawless and Nadeau 1995); the naive one is
    the sum of d/n². ``horizon`` only cuts rows. For ``digits`` see the module's description.
    """
    if not units:
        return []
    everyone = [
        Spell(entry, duration, 0, Fraction(unit.weight)) for unit in units for entry, duration in unit.spells
    ]
    happened: dict[int, Fraction] = defaultdict(Fraction)
    for unit in units:
        for tenure in unit.events:
            happened[tenure] += Fraction(unit.weight)
    every = {*shown_durations(everyone, grid, None), *happened}
    shown = {duration for duration in every if horizon is None or duration <= horizon}
    at_risk = _at_risk_counter(everyone)
    if digits:
        return _counts_of_many(units, at_risk, happened, sorted(shown), digits)
    scores = [Fraction(0) for _ in units]
    mean, naive = Fraction(0), Fraction(0)
    rows: list[CountRow] = []
    for t in sorted({*shown, *happened}):
        n, d = at_risk(t), happened.get(t, Fraction(0))
        if d:
            mean += d / n
            naive += d / n**2
            for i, unit in enumerate(units):
                own = sum(entry < t <= end or entry == t == 0 for entry, end in unit.spells)
                scores[i] += (unit.events.count(t) - own * d / n) / n
        if t in shown:
            robust = sum(
                (unit.weight * score**2 for unit, score in zip(units, scores, strict=True)), Fraction(0)
            )
            rows.append(CountRow(t, n, d, mean, robust, naive))
    return rows


def _counts_of_many(
    units: Sequence[Unit],
    at_risk: Callable[[int], Fraction],
    happened: Mapping[int, Fraction],
    shown: Sequence[int],
    digits: int,
) -> list[CountRow]:
    """Work the definition out in steps: a unit's score is a - r L.

    r is the number of its spells at risk, L the naive variance. a changes by 1/n with each event of the unit,
    by L where a spell of it enters and by -L where one has left. Sums over units of a², a r and r² therefore
    change only where a unit's own a or r does.
    """
    # tenure to (unit, events, spells that begin to be at risk after it, spells that cease to be)
    changes: dict[int, dict[int, list[int]]] = defaultdict(dict)
    for i, unit in enumerate(units):
        for tenure in unit.events:
            changes[tenure].setdefault(i, [0, 0, 0])[0] += 1
        for entry, end in unit.spells:
            if entry < end or end == 0:
                changes[entry].setdefault(i, [0, 0, 0])[1] += 1
                changes[end].setdefault(i, [0, 0, 0])[2] += 1
    a, r = [Fraction(0)] * len(units), [0] * len(units)
    for i, unit in enumerate(units):
        r[i] = sum(entry == 0 for entry, _ in unit.spells)
    aa, ar = Fraction(0), Fraction(0)
    rr = sum((Fraction(unit.weight) * r[i] ** 2 for i, unit in enumerate(units)), Fraction(0))
    mean, naive = Fraction(0), Fraction(0)
    rows: list[CountRow] = []
    wanted = set(shown)
    for t in sorted({*wanted, *changes}):
        n, d = at_risk(t), happened.get(t, Fraction(0))
        if d:
            mean = rounded(mean + d / n, digits)
            naive = rounded(naive + d / n**2, digits)
        later = []
        for i, (events, entering, leaving) in changes.get(t, {}).items():
            weight = Fraction(units[i].weight)
            old_a, old_r = a[i], r[i]
            if events:
                a[i] = rounded(old_a + events / n, digits)
                aa += weight * (a[i] ** 2 - old_a**2)
                ar += weight * (a[i] - old_a) * old_r
            if (moved := (entering if t else 0) - leaving) != 0:
                later.append((i, weight, moved))
        for i, weight, moved in later:
            old_a, old_r = a[i], r[i]
            a[i], r[i] = rounded(old_a + moved * naive, digits), old_r + moved
            aa += weight * (a[i] ** 2 - old_a**2)
            ar += weight * (a[i] * r[i] - old_a * old_r)
            rr += weight * (r[i] ** 2 - old_r**2)
        aa, ar = rounded(aa, digits), rounded(ar, digits)
        if t in wanted:
            robust = rounded(aa - 2 * naive * ar + naive**2 * rr, digits)
            rows.append(CountRow(t, n, d, mean, robust, naive))
    return rows


@dataclass(frozen=True)
class GrayTest:
    """Gray's test: the statistic is None where there is nothing to compare; observed counts the events."""

    scores: tuple[Fraction, ...]
    covariance: tuple[tuple[Fraction, ...], ...]
    statistic: Fraction | None
    degrees_of_freedom: int
    observed: Fraction = Fraction(0)


def gray_test(
    groups: Sequence[Sequence[Spell]], causes: Iterable[str], digits: int | None = None
) -> GrayTest:
    """Compare the incidence of some causes between groups (Gray 1988, with all moments weighted alike).

    A group counts while someone in it is at risk and its survival is above 0. As if no other cause took
    anyone,
    reach = at risk / survival; the pooled incidence rises by events / reach of all groups. Ties are corrected
    for as in the hypergeometric variance. For ``digits`` see the module's description.
    """
    wanted, size = set(causes), len(groups)
    courses = [_Course(spells, wanted, digits) for spells in groups]
    times = sorted({t for course in courses for t in (*course.own, *course.others)})
    scores = [Fraction(0)] * size
    moments = []
    pooled, observed = Fraction(0), Fraction(0)
    for t in times:
        states = [course.state(t) for course in courses]
        reach = [s.n / s.before if s.n and s.before else Fraction(0) for s in states]
        own = [s.own if r else Fraction(0) for s, r in zip(states, reach, strict=True)]
        ended, all_reach = sum(own, Fraction(0)), sum(reach, Fraction(0))
        gray = [r * (1 - s.incidence) for r, s in zip(reach, states, strict=True)]
        if sum(gray):
            for i in range(size):
                scores[i] = rounded(scores[i] + own[i] - ended * gray[i] / sum(gray), digits)
        observed += ended
        step = ended / all_reach if all_reach else Fraction(0)
        direct = [
            [reach[k] * ((i == k) - reach[i] / all_reach) if all_reach else Fraction(0) for i in range(size)]
            for k in range(size)
        ]
        weight = step / (1 - pooled) if pooled < 1 else Fraction(0)
        pooled = rounded(pooled + step, digits)
        moments.append((states, reach, all_reach, ended, direct, weight, step, pooled))
    covariance = [[Fraction(0)] * size for _ in range(size)]
    to_come = [[Fraction(0)] * size for _ in range(size)]
    for states, reach, all_reach, ended, direct, weight, step, incidence in reversed(moments):
        for k, s in enumerate(states):
            ratio = (1 - incidence) / s.after if s.after else Fraction(1)
            if reach[k] and ended:
                tie = _untied(ended, all_reach * s.before)
                terms = [direct[k][i] + (1 - ratio if s.after else 1) * to_come[k][i] for i in range(size)]
                _add_products(covariance, terms, tie * step * s.before / s.n, digits)
            if s.after and s.others:
                terms = [ratio * to_come[k][i] for i in range(size)]
                factor = _untied(s.others, s.n) * s.others * (s.before / s.n) ** 2
                _add_products(covariance, terms, factor, digits)
        for k in range(size):
            for i in range(size):
                to_come[k][i] = rounded(to_come[k][i] + direct[k][i] * weight, digits)
    statistic, rank = quadratic_form(
        scores, covariance, 0 if digits is None else Fraction(1, 10 ** (digits // 2))
    )
    return GrayTest(tuple(scores), tuple(map(tuple, covariance)), statistic if rank else None, rank, observed)


def _untied(events: Fraction, of: Fraction) -> Fraction:
    if events <= 1:
        return Fraction(1)
    return max(Fraction(0), 1 - (events - 1) / (of - 1)) if of > events else Fraction(0)


def _add_products(
    matrix: list[list[Fraction]], terms: Sequence[Fraction], factor: Fraction, digits: int | None
) -> None:
    for i, one in enumerate(terms):
        for j, other in enumerate(terms):
            matrix[i][j] = rounded(matrix[i][j] + one * other * factor, digits)


@dataclass(frozen=True)
class _State:
    n: Fraction
    own: Fraction
    others: Fraction
    before: Fraction
    after: Fraction
    incidence: Fraction


class _Course:
    """One group as Gray's test sees it: numbers, survival and incidence just before any duration."""

    def __init__(self, spells: Sequence[Spell], wanted: set[str], digits: int | None) -> None:
        self.own: dict[int, Fraction] = defaultdict(Fraction)
        self.others: dict[int, Fraction] = defaultdict(Fraction)
        for spell in spells:
            if spell.counts and spell.event:
                cause = "unknown" if spell.cause is None else spell.cause
                (self.own if cause in wanted else self.others)[spell.duration] += Fraction(spell.weight)
        self.at_risk = _at_risk_counter(spells)
        everyone = {
            t: self.own.get(t, Fraction(0)) + self.others.get(t, Fraction(0))
            for t in (*self.own, *self.others)
        }
        self.steps = incidence_steps(self.at_risk, dict(self.own), everyone, digits)
        self.durations = [step.duration for step in self.steps]

    def state(self, t: int) -> _State:
        place = bisect_left(self.durations, t)
        earlier = self.steps[place - 1] if place else None
        here = self.steps[place] if t in self.durations[place : place + 1] else None
        before = earlier.survival if earlier else Fraction(1)
        return _State(
            self.at_risk(t),
            self.own.get(t, Fraction(0)),
            self.others.get(t, Fraction(0)),
            before,
            here.survival if here else before,
            earlier.incidence if earlier else Fraction(0),
        )


def quadratic_form(
    scores: Sequence[Fraction], covariance: Sequence[Sequence[Fraction]], negligible: Fraction | int = 0
) -> tuple[Fraction, int]:
    """Return s' V⁻ s by elimination, passing over pivots of 0, and the rank of V.

    A pivot that is no more than ``negligible`` times the variance it is left of counts as 0.
    """
    v, s = [list(row) for row in covariance], list(scores)
    total, rank = Fraction(0), 0
    for p in range(len(s)):
        if v[p][p] <= negligible * covariance[p][p]:
            continue
        rank += 1
        total += s[p] ** 2 / v[p][p]
        for i in range(p + 1, len(s)):
            factor = v[i][p] / v[p][p]
            s[i] -= factor * s[p]
            for j in range(p + 1, len(s)):
                v[i][j] -= factor * v[p][j]
    return total, rank


@dataclass(frozen=True)
class History:
    """One subject: the states it turned to, by ascending tenure, observed after ``entry`` up to ``end``."""

    turns: tuple[tuple[int, str], ...]
    end: int
    entry: int = 0


@dataclass(frozen=True)
class StateRow:
    """One state at one duration; ``share`` is None where nobody was seen at tenure 0."""

    state: str
    duration: int
    at_risk: int
    arrivals: int
    departures: int
    share: Fraction | None


def state_shares(
    histories: Sequence[History],
    states: Sequence[str],
    horizon: int | None = None,
    grid: str = "steps",
    digits: int | None = None,
) -> list[StateRow]:
    """Compute Aalen and Johansen's shares of several states, at each duration at which a stay ends.

    ``horizon`` only cuts rows; with ``grid='every'`` there is a row for each unit. For ``digits`` see the
    module's description.
    """
    course = StateCourse(histories, states)
    seen = sum(course.start.values())
    shares = {state: Fraction(course.start[state], seen or 1) for state in states}
    steps = {0, *course.ends}
    last = max(steps) if horizon is None else min(horizon, max(steps))
    rows = []
    for t in range(last + 1) if grid == "every" else sorted(t for t in steps if t <= last):
        if t in course.ends and t and seen:
            shares = _moved_on(shares, course, t, digits)
        for state in states:
            rows.append(
                StateRow(
                    state,
                    t,
                    course.at_risk(state, t),
                    sum(course.moves[t, g, state] for g in states if g != state),
                    sum(course.moves[t, state, h] for h in states if h != state),
                    shares[state] if seen else None,
                )
            )
    return rows


class StateCourse:
    """Who is in which state by tenure, and who moves; a stay is at risk after it begins, up to its end."""

    def __init__(self, histories: Sequence[History], states: Sequence[str]) -> None:
        self.states = states
        self.start: Counter[str] = Counter()
        self.moves: Counter[tuple[int, str, str]] = Counter()
        self.begins: set[int] = set()
        self.ends: set[int] = set()
        stays: dict[str, list[tuple[int, int]]] = defaultdict(list)
        for history in histories:
            entry = max(history.entry, history.turns[0][0])
            ends = [*(t for t, _ in history.turns[1:]), history.end]
            nexts = [*(state for _, state in history.turns[1:]), None]
            for (begin, state), end, following in zip(history.turns, ends, nexts, strict=True):
                if begin == entry == 0:
                    self.start[state] += 1
                if end > max(begin, entry):
                    stays[state].append((max(begin, entry), end))
                    self.begins.add(max(begin, entry))
                    self.ends.add(end)
                    if following not in (None, state):
                        self.moves[end, state, str(following)] += 1
        self._begun = {state: sorted(begin for begin, _ in own) for state, own in stays.items()}
        self._ended = {state: sorted(end for _, end in own) for state, own in stays.items()}

    def at_risk(self, state: str, t: int) -> int:
        """Return how many are in the state just before t; at 0 those seen in it."""
        if t == 0:
            return self.start[state]
        return bisect_left(self._begun.get(state, []), t) - bisect_left(self._ended.get(state, []), t)


def _moved_on(
    shares: Mapping[str, Fraction], course: StateCourse, t: int, digits: int | None
) -> dict[str, Fraction]:
    states = course.states
    moved = dict.fromkeys(states, Fraction(0))
    for g in states:
        n = course.at_risk(g, t)
        away = sum(course.moves[t, g, h] for h in states if h != g)
        for h in states:
            if g == h:
                moved[h] += shares[g] * (Fraction(n - away, n) if n else 1)
            elif course.moves[t, g, h]:
                moved[h] += shares[g] * Fraction(course.moves[t, g, h], n)
    return {state: rounded(share, digits) for state, share in moved.items()}
