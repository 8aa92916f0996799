"""What published read-outs say of each group, and the plain words for it."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

OBSERVED, BEYOND_FOLLOW_UP = "observed", "beyond_follow_up"
REACHED, NOT_REACHED = "reached", "not_reached"
#: Of a read-out whose table has no row for it.
MISSING = "missing"

#: What is told in place of a figure that is not there.
STATUS_IN_WORDS = {
    BEYOND_FOLLOW_UP: "not yet observable",
    NOT_REACHED: "not reached",
    "too_few_at_risk": "too few at risk",
    "none_survived": "nobody left",
    "several_curves": "several curves in one",
    MISSING: "missing from the table",
}

#: Why a membership ended, as the membership book has it.
REASONS_IN_WORDS = {
    "unused": "not using it",
    "moved": "moved away",
    "cost": "too dear",
    "other": "other reasons",
}

#: What the builders' fault codes mean, for somebody who has not read the documentation.
FAULTS_IN_WORDS = {
    "unreadable_recorded_at": "unreadable recorded-at date",
    "recorded_after_as_of": "typed in after the as-of day",
    "no_subject": "nobody named",
    "no_start": "no start",
    "unreadable_start": "unreadable start",
    "starts_after_as_of": "starts after the as-of day",
    "unreadable_end": "unreadable end",
    "ends_before_start": "ends before it starts",
    "duplicate_row": "entered twice",
    "overlaps_earlier": "overlaps an earlier row",
    "starts_within_grace": "begun too recently",
    "ended_before_observation": "over before records began",
    "no_time": "no date",
    "unreadable_time": "unreadable date",
    "after_as_of": "after the as-of day",
    "no_kind": "no kind",
    "unknown_kind": "unknown kind",
    "already_open": "began while going on",
    "nothing_open": "ended without having begun",
    "no_status": "no status",
    "conflicting_status": "contradicts another row",
    "no_origin": "before anything began",
    "no_duration": "no duration",
    "unreadable_duration": "unreadable duration",
    "negative_duration": "duration below 0",
    "duration_not_whole": "duration not whole",
    "no_event": "ended or not: missing",
    "unreadable_event": "ended or not: unreadable",
    "unreadable_entry": "unreadable entry",
    "negative_entry": "entry below 0",
    "entry_not_whole": "entry not whole",
    "entry_after_duration": "entry beyond the duration",
    "no_weight": "no weight",
    "unreadable_weight": "unreadable weight",
    "weight_not_positive": "weight not above 0",
}


@dataclass(frozen=True)
class ShareAt:
    """Share whose event has not happened by a duration; figures None unless status is OBSERVED.

    The bounds alone are None where survival is 0.
    """

    duration: int
    survival: float | None
    lower: float | None
    upper: float | None
    status: str


@dataclass(frozen=True)
class TimeToHalf:
    """First duration at which half have had the event, with Brookmeyer and Crowley's limits.

    `duration` is None unless status is REACHED; a limit is None where its bound stays above a half.
    """

    duration: int | None
    lower: int | None
    upper: int | None
    status: str


@dataclass(frozen=True)
class AverageWithin:
    """Restricted mean: average units up to the event, or to the horizon where that comes first.

    Figures are None unless status is OBSERVED.
    """

    horizon: int
    mean: float | None
    lower: float | None
    upper: float | None
    status: str


@dataclass(frozen=True)
class GroupFigures:
    """What is told of one group; follow_up is its longest duration, in units."""

    label: str
    spells: int
    open_spells: int
    follow_up: int
    half: TimeToHalf
    shares: tuple[ShareAt, ...]
    average: AverageWithin

    @property
    def statuses(self) -> frozenset[str]:
        """The statuses of all its read-outs."""
        return frozenset((self.half.status, *(share.status for share in self.shares), self.average.status))


def share_at(rows: Iterable[Mapping[str, Any]], duration: int) -> ShareAt:
    """Find the share still there at a duration in one group's rows of `survival_at`."""
    row = _row(rows, "duration", duration)
    return ShareAt(
        duration, row["survival"], row["survival_lower"], row["survival_upper"], row["status"] or MISSING
    )


def time_to_half(rows: Iterable[Mapping[str, Any]]) -> TimeToHalf:
    """Find the median and its limits in one group's rows of `survival_quantiles`."""
    row = _row(rows, "share", 0.5)
    return TimeToHalf(row["duration"], row["duration_lower"], row["duration_upper"], row["status"] or MISSING)


def average_within(rows: Iterable[Mapping[str, Any]], horizon: int) -> AverageWithin:
    """Find the average up to a horizon in one group's rows of `restricted_mean`."""
    row = _row(rows, "horizon", horizon)
    return AverageWithin(
        horizon,
        row["restricted_mean"],
        row["restricted_mean_lower"],
        row["restricted_mean_upper"],
        row["status"] or MISSING,
    )


def _row(rows: Iterable[Mapping[str, Any]], column: str, value: float) -> Mapping[str, Any]:
    """Find the row for one value; a row of nothing but None where there is none."""
    nothing: Mapping[str, Any] = defaultdict(lambda: None)
    return next((row for row in rows if row[column] == value), nothing)


def half_in_words(half: TimeToHalf) -> str:
    """For instance '441 (398 to 463)', '441 (398 or more)' or 'not reached'."""
    if half.duration is None:
        return status_in_words(half.status)
    if half.lower is None:
        return f"{half.duration:,}"
    limits = f"{half.lower:,} or more" if half.upper is None else f"{half.lower:,} to {half.upper:,}"
    return f"{half.duration:,} ({limits})"


def share_in_words(share: ShareAt) -> str:
    """For instance '74.3% (72.1 to 76.3)' or 'not yet observable'; no interval at 0 and at 1."""
    if share.survival is None:
        return status_in_words(share.status)
    if share.lower is None or share.upper is None or share.survival == 1:
        return percent(share.survival)
    return f"{percent(share.survival)} ({100 * share.lower:.1f} to {100 * share.upper:.1f})"


def average_in_words(average: AverageWithin) -> str:
    """For instance '311 (307 to 315)' or 'not yet observable'; no interval where nothing happened."""
    if average.mean is None:
        return status_in_words(average.status)
    if average.lower is None or average.upper is None or average.lower == average.upper:
        return f"{average.mean:,.0f}"
    return f"{average.mean:,.0f} ({average.lower:,.0f} to {average.upper:,.0f})"


def incidence_in_words(row: Mapping[str, Any]) -> str:
    """A row of `incidence_at`: for instance '4.4% (3.3 to 5.8)' or 'not yet observable'."""
    bounds = row["incidence_lower"], row["incidence_upper"]
    if row["incidence"] is None:
        return status_in_words(row["status"] or MISSING)
    if None in bounds or row["incidence"] == 0:
        return percent(row["incidence"])
    return f"{percent(row['incidence'])} ({100 * bounds[0]:.1f} to {100 * bounds[1]:.1f})"


def count_in_words(rows: Iterable[Mapping[str, Any]], duration: int) -> str:
    """One group's `mean_cumulative_count` at a duration: '4.67 (4.48 to 4.86)', or why there is none."""
    known = sorted(rows, key=lambda row: row["duration"])
    if not known:
        return status_in_words(MISSING)
    reached = [row for row in known if row["duration"] <= duration]
    if not reached or known[-1]["duration"] < duration:
        return status_in_words(BEYOND_FOLLOW_UP)
    row = reached[-1]
    if row["mean_count"] is None:
        return status_in_words("too_few_at_risk")
    if row["mean_count_lower"] is None or row["mean_count"] == 0:
        return f"{row['mean_count']:.2f}"
    return f"{row['mean_count']:.2f} ({row['mean_count_lower']:.2f} to {row['mean_count_upper']:.2f})"


def ratio_in_words(row: Mapping[str, Any]) -> str:
    """A row of `difference_in_mean_count` as a multiple: for instance '1.56 times (1.47 to 1.65)'."""
    if row["ratio"] is None:
        return status_in_words(row["status"] or MISSING)
    if row["ratio_lower"] is None:
        return f"{row['ratio']:.2f} times"
    return f"{row['ratio']:.2f} times ({row['ratio_lower']:.2f} to {row['ratio_upper']:.2f})"


def states_in_words(rows: Iterable[Mapping[str, Any]], states: Sequence[str], duration: int) -> list[str]:
    """The shares of the states in one group's rows of `state_shares` at a duration, in their order."""
    known = sorted(rows, key=lambda row: row["duration"])
    if known and known[-1]["duration"] < duration:
        return [status_in_words(BEYOND_FOLLOW_UP)] * len(states)
    said = []
    for state in states:
        reached = [row for row in known if row["state"] == state and row["duration"] <= duration]
        share = reached[-1]["share"] if reached else None
        said.append(
            status_in_words(MISSING if not reached else BEYOND_FOLLOW_UP) if share is None else percent(share)
        )
    return said


def chance_in_words(p_value: float | None, status: str) -> str:
    """A p-value: for instance 'p = 0.009', 'p < 0.001', or why there is none."""
    if p_value is None:
        return status.replace("_", " ")
    return "p < 0.001" if p_value < 0.001 else f"p = {p_value:.3f}"


def verdict_in_words(row: Mapping[str, Any]) -> str:
    """A test of groups at 5%: for instance 'yes (log-rank 95.4, p < 0.001)'; 'not shown' is not 'no'."""
    p_value, status = row["p_value"], row["status"]
    if p_value is None:
        return f"cannot be told ({status_in_words(status)})"
    shown = "yes" if p_value < 0.05 else "not shown"
    return f"{shown} ({row['weighting']} {row['statistic']:,.1f}, {chance_in_words(p_value, status)})"


def pair_in_words(row: Mapping[str, Any]) -> str:
    """For instance 'household at 0.65 times the rate of individual (0.60 to 0.71), p < 0.001'.

    A one-step hazard ratio far from 1 is only told as a direction.
    """
    one, other, ratio = row["group_a"], row["group_b"], row["hazard_ratio"]
    chance = chance_in_words(row["p_value_adjusted"], row["status"])
    if ratio is None:
        return f"{one} and {other}: {chance}"
    if ratio < 1 / 3:
        return f"{one} at less than a third of the rate of {other}, {chance}"
    if ratio > 3:
        return f"{one} at more than 3 times the rate of {other}, {chance}"
    lower, upper = row["hazard_ratio_lower"], row["hazard_ratio_upper"]
    return f"{one} at {ratio:.2f} times the rate of {other} ({lower:.2f} to {upper:.2f}), {chance}"


def status_in_words(status: str) -> str:
    """What a read-out's status means, for somebody who has not read the documentation."""
    return STATUS_IN_WORDS.get(status, status.replace("_", " "))


def percent(share: float) -> str:
    """A share as a percentage with one decimal."""
    return f"{100 * share:.1f}%"


def faults_in_words(counts: Mapping[str, int]) -> str:
    """Counts by fault code, most frequent first, in words."""
    ranked = sorted(counts.items(), key=lambda item: (-item[1], item[0]))
    return ", ".join(f"{FAULTS_IN_WORDS.get(fault, fault)} ({count:,})" for fault, count in ranked)
