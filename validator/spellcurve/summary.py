"""What a curve says, read off its published rows, and the plain words for it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

OBSERVED, BEYOND_FOLLOW_UP = "observed", "beyond_follow_up"
REACHED, NOT_REACHED = "reached", "not_reached"

#: exp(sum(ln)) lands beside round values; a level counts as reached within this relative distance.
LEVEL_TOLERANCE = 1e-9

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
    """Share whose event has not happened by a duration; figures None where status is BEYOND_FOLLOW_UP.

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

    `duration` is None where status is NOT_REACHED; a limit is None where its bound stays above a half.
    """

    duration: int | None
    lower: int | None
    upper: int | None
    status: str


@dataclass(frozen=True)
class GroupFigures:
    """What is told of one group; follow_up is its longest duration, in units."""

    label: str
    spells: int
    open_spells: int
    half: TimeToHalf
    shares: tuple[ShareAt, ...]
    follow_up: int


def share_at(curve: Sequence[Mapping[str, Any]], duration: int) -> ShareAt:
    """Read the share still there at a duration off one group's curve.

    Args:
        curve: rows with duration, survival, survival_lower and survival_upper, in order of duration.
        duration: whole units.
    """
    passed = [row for row in curve if row["duration"] <= duration]
    if not passed:
        return ShareAt(duration, None, None, None, BEYOND_FOLLOW_UP)
    row = passed[-1]
    watched = duration <= curve[-1]["duration"] or row["survival"] == 0
    if not watched or row["survival"] is None:
        return ShareAt(duration, None, None, None, BEYOND_FOLLOW_UP)
    return ShareAt(duration, row["survival"], row["survival_lower"], row["survival_upper"], OBSERVED)


def time_to_half(curve: Sequence[Mapping[str, Any]]) -> TimeToHalf:
    """Read the median and its limits off one group's curve (rows as for `share_at`).

    Source: Brookmeyer and Crowley 1982; each is the first duration at which survival, or a bound
    of it, is at or below a half.
    """
    middle = _first_at_or_below(curve, "survival", 0.5)
    return TimeToHalf(
        middle,
        _first_at_or_below(curve, "survival_lower", 0.5),
        _first_at_or_below(curve, "survival_upper", 0.5),
        NOT_REACHED if middle is None else REACHED,
    )


def _first_at_or_below(curve: Sequence[Mapping[str, Any]], column: str, level: float) -> int | None:
    for row in curve:
        value = row[column]
        if value is not None and value <= level * (1 + LEVEL_TOLERANCE):
            return int(row["duration"])
    return None


def figures(
    label: str, curve: Sequence[Mapping[str, Any]], spells: int, open_spells: int, durations: Sequence[int]
) -> GroupFigures:
    """Put together what is told of one group, whose curve has at least its row at 0."""
    return GroupFigures(
        label,
        spells,
        open_spells,
        time_to_half(curve),
        tuple(share_at(curve, duration) for duration in durations),
        int(curve[-1]["duration"]),
    )


def half_in_words(group: GroupFigures) -> str:
    """For instance '441 (398 to 463)', '441 (398 or more)' or 'not reached'."""
    half = group.half
    if half.duration is None:
        return "not reached"
    if half.lower is None:
        return f"{half.duration:,}"
    limits = f"{half.lower:,} or more" if half.upper is None else f"{half.lower:,} to {half.upper:,}"
    return f"{half.duration:,} ({limits})"


def share_in_words(share: ShareAt) -> str:
    """For instance '74.3% (72.1 to 76.3)' or 'not yet observable'; no interval at 0 and at 1."""
    if share.survival is None:
        return "not yet observable"
    if share.lower is None or share.upper is None or share.survival == 1:
        return percent(share.survival)
    return f"{percent(share.survival)} ({100 * share.lower:.1f} to {100 * share.upper:.1f})"


def percent(share: float) -> str:
    """A share as a percentage with one decimal."""
    return f"{100 * share:.1f}%"


def faults_in_words(counts: Mapping[str, int]) -> str:
    """Counts by fault code, most frequent first, in words."""
    ranked = sorted(counts.items(), key=lambda item: (-item[1], item[0]))
    return ", ".join(f"{FAULTS_IN_WORDS.get(fault, fault)} ({count:,})" for fault, count in ranked)
