"""Invented records of the Harrow Lane Tool Library, from a seed.

Everything here is made up. The same seed and size always give the same rows: random numbers are raw bits of
PCG64, turned into figures by comparison with tables, so that neither a newer numpy nor another processor
changes a row. The committed seeds (`seeds/demo/*.csv`) are what `write_seeds` gives with its defaults.

The records are deliberately untidy: dates that are not dates, members who leave twice, rows typed in months
late. What a builder does with those is half of what the demo shows.
"""

from __future__ import annotations

import csv
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

if TYPE_CHECKING:
    import duckdb

DEFAULT_MEMBERS = 3_000
DEFAULT_SEED = 1897
FEWEST_MEMBERS = 50
MOST_MEMBERS = 1_000_000

OPENED = date(2015, 1, 6)
RECORDS_BEGAN = date(2020, 7, 1)
AS_OF = date(2026, 7, 1)

PLANS = ["household", "individual"]
REASONS = ["moved", "cost", "unused", "other"]
TOOL_KINDS = ["garden", "hand", "ladder", "power"]
PARTS = ["drive belt", "planer knife", "saw blade"]

_EPOCH = date(1970, 1, 1)
_OPENED = (OPENED - _EPOCH).days
_BEGAN = (RECORDS_BEGAN - _EPOCH).days
_AS_OF = (AS_OF - _EPOCH).days
_NEVER = 10**6
_LONGEST = 6_000
_ROLL_STARTS = (date(2025, 1, 5) - _EPOCH).days
_ROLL_ENDS = (date(2026, 6, 28) - _EPOCH).days
_LOST_SHEETS = {(day - _EPOCH).days for day in (date(2025, 4, 20), date(2025, 12, 28), date(2026, 1, 4))}

Ints = np.ndarray
TextRow = dict[str, str | None]


class _Dice:
    """Random figures that depend on the seed, a purpose and nothing else."""

    def __init__(self, seed: int, purpose: int) -> None:
        self._bits = np.random.PCG64(np.random.SeedSequence([seed, purpose]))

    def uniform(self, count: int) -> np.ndarray:
        raw = self._bits.random_raw(count) if count else np.empty(0, dtype=np.uint64)
        return (np.asarray(raw, dtype=np.uint64) >> np.uint64(11)).astype(np.float64) * 2.0**-53

    def between(self, count: int, lowest: int, highest: int) -> Ints:
        """Whole numbers from `lowest` to `highest`, both included."""
        return lowest + np.floor(self.uniform(count) * (highest - lowest + 1)).astype(np.int64)

    def chance(self, count: int, share: float) -> np.ndarray:
        return self.uniform(count) < share

    def choose(self, count: int, shares: Sequence[float]) -> Ints:
        """Positions 0, 1, … with the given shares, which add up to 1."""
        bounds = np.cumsum(np.asarray(shares))[:-1]
        return np.searchsorted(bounds, self.uniform(count), side="right").astype(np.int64)

    def waits(self, still_there: np.ndarray, waited: Ints) -> Ints:
        """Total waits, in units, of those who have waited `waited` already.

        `still_there[d]` is the share whose wait is longer than d. Waits beyond the table are its length.
        """
        reached = np.where(waited > 0, still_there[np.maximum(waited, 1) - 1], 1.0)
        level = self.uniform(len(waited)) * reached
        return np.searchsorted(-still_there, -level, side="left").astype(np.int64)


def _still_there(at_once: float, daily: float, early: float, at_renewal: Sequence[float]) -> np.ndarray:
    """Share whose membership lasts longer than d days, for every d: a flat hazard, an early one, renewals."""
    hazard = np.full(_LONGEST, daily)
    hazard[1:61] = early
    hazard[0] = at_once
    for year, share in enumerate(at_renewal, start=1):
        hazard[365 * year : 365 * year + 14] = share
    return np.cumprod(1.0 - hazard)


_MEMBERSHIP_LASTS = [
    _still_there(0.002, 0.00042, 0.0008, (0.0070, 0.0050, 0.0040, 0.0030, 0.0030)),
    _still_there(0.005, 0.00085, 0.0022, (0.0120, 0.0090, 0.0070, 0.0050, 0.0050)),
]


def _mixed_waits(brisk_share: float, brisk: float, slow: float, never: float = 0.0) -> np.ndarray:
    """Share still waiting after d days when some are brisk, some slow and some never come."""
    steps = np.ones(3_000)
    brisk_left = np.cumprod(steps * (1.0 - brisk))
    slow_left = np.cumprod(steps * (1.0 - slow))
    return never + (1.0 - never) * (brisk_share * brisk_left + (1.0 - brisk_share) * slow_left)


_FIRST_LOAN = [_mixed_waits(0.70, 0.075, 0.006, 0.05), _mixed_waits(0.62, 0.060, 0.004, 0.11)]
_NEXT_LOAN = [_mixed_waits(0.68, 0.022, 0.0050), _mixed_waits(0.60, 0.018, 0.0035)]


def _wears_out(start: float, growth: float, hours: int = 4_000) -> np.ndarray:
    """Share of parts that outlast h hours when the hazard grows in a straight line."""
    hazard = start + growth * np.arange(hours)
    return np.cumprod(1.0 - hazard)


_PART_LASTS = [_wears_out(0.00004, 0.0000001), _wears_out(0.0002, 0.0000022), _wears_out(0.0008, 0.0000100)]


@dataclass(frozen=True)
class Stints:
    """Stretches of membership, one element each: what truly happened, before anybody wrote it down.

    member counts from 1; start and end are days since 1970 (ends from the as-of day on are not known yet);
    plan and reason are positions in PLANS and REASONS.
    """

    member: Ints
    plan: Ints
    start: Ints
    end: Ints
    reason: Ints
    paper: np.ndarray

    def pick(self, chosen: np.ndarray) -> Stints:
        """Some of the stints, by position or by mask."""
        return Stints(
            self.member[chosen],
            self.plan[chosen],
            self.start[chosen],
            self.end[chosen],
            self.reason[chosen],
            self.paper[chosen],
        )


def _opening_day(days: Ints) -> Ints:
    """The library is shut on Mondays."""
    return days + ((days + 3) % 7 == 0)


def _members(count: int, dice: _Dice) -> tuple[Ints, Ints, np.ndarray]:
    """Joining day, plan and whether the record was on paper, in order of joining."""
    paper = dice.chance(count, 0.12)
    early, late = dice.uniform(count), dice.uniform(count)
    grown = np.where(dice.chance(count, 0.4), np.maximum(early, late), early)
    digital_days = _BEGAN + np.floor(grown * (_AS_OF - 1 - _BEGAN)).astype(np.int64)
    paper_days = _OPENED + np.floor(early * (_BEGAN - 8 - _OPENED)).astype(np.int64)
    joined = np.minimum(_opening_day(np.where(paper, paper_days, digital_days)), _AS_OF - 1)
    plan = dice.choose(count, (0.44, 0.56))
    order = np.argsort(joined, kind="stable")
    return joined[order], plan[order], paper[order]


def _lengths(plan: Ints, waited: Ints, dice: _Dice) -> Ints:
    household = dice.waits(_MEMBERSHIP_LASTS[0], waited)
    individual = dice.waits(_MEMBERSHIP_LASTS[1], waited)
    return np.where(plan == 0, household, individual)


def _reasons(length: Ints, dice: _Dice) -> Ints:
    usual = dice.choose(len(length), (0.30, 0.16, 0.36, 0.18))
    renewing = dice.choose(len(length), (0.14, 0.44, 0.30, 0.12))
    return np.where((length >= 365) & (length % 365 < 14), renewing, usual)


def _stints(joined: Ints, plan: Ints, paper: np.ndarray, dice: _Dice) -> Stints:
    """First stints and up to two returns, in order of member and start."""
    member = np.arange(1, len(joined) + 1)
    start, waited = joined, np.where(paper, _BEGAN - joined + 1, 0)
    rounds: list[Stints] = []
    for _ in range(3):
        length = _lengths(plan, waited, dice)
        end = np.where(length >= _LONGEST, _NEVER, start + length)
        stint = Stints(member, plan, start, end, _reasons(length, dice), paper)
        rounds.append(stint)
        soon = dice.between(len(member), 1, 27)
        later = dice.between(len(member), 40, 420)
        gap = np.where(dice.chance(len(member), 0.45), soon, later)
        back = dice.chance(len(member), 0.21) & (end + gap < _AS_OF)
        member, plan, paper, start = member[back], plan[back], paper[back], (end + gap)[back]
        waited = np.zeros(len(member), dtype=np.int64)
    return _in_order(rounds)


def _in_order(rounds: list[Stints]) -> Stints:
    joined = Stints(
        *(
            np.concatenate([getattr(part, name) for part in rounds])
            for name in ("member", "plan", "start", "end", "reason", "paper")
        )
    )
    return joined.pick(np.lexsort((joined.start, joined.member)))


def _some(count_per_thousand: float, members: int) -> int:
    """How many faulty rows of one kind a library of this size has: never none."""
    return max(1, round(count_per_thousand * members / 1_000))


def _iso(day: int) -> str:
    return (_EPOCH + timedelta(days=int(day))).isoformat()


def _member_id(number: int) -> str:
    return f"M{int(number):07d}"


class _Untidy:
    """Collects faulty rows of one table as text, each with the day it is filed under."""

    def __init__(self, columns: Sequence[str], members: int, dice: _Dice) -> None:
        self._columns = columns
        self._rows: list[tuple[int, TextRow]] = []
        self.members = members
        self.dice = dice

    def add(self, per_thousand: float, make: Callable[[str, int], TextRow]) -> None:
        """Adds the rows that `make` gives for members and days drawn at random."""
        count = _some(per_thousand, self.members)
        numbers = self.dice.between(count, 1, self.members)
        days = self.dice.between(count, _BEGAN, _AS_OF - 60)
        for number, day in zip(numbers.tolist(), days.tolist(), strict=True):
            self._rows.append((day, make(_member_id(number), day)))

    def repeat(self, rows: Iterator[tuple[int, TextRow]]) -> None:
        """Adds given rows as they are."""
        self._rows.extend(rows)

    def frame(self, first_tie: int) -> pd.DataFrame:
        texts: dict[str, object] = {
            name: pd.Series([row.get(name) for _, row in self._rows], dtype="string")
            for name in self._columns
        }
        texts["filed_on"] = np.array([day for day, _ in self._rows], dtype=np.int64)
        texts["tie"] = first_tie + np.arange(len(self._rows))
        return pd.DataFrame(texts)


def _named(codes: Ints, names: Sequence[str]) -> pd.Categorical:
    """Text by position; -1 is null."""
    positions: Any = codes.astype(np.int64)
    return pd.Categorical.from_codes(positions, categories=pd.Index(list(names)))


_DAY = "strftime(date '1970-01-01' + cast({0} as integer), '%Y-%m-%d')"
_MOMENT = (
    "strftime(date '1970-01-01' + cast({0} as integer) + to_minutes(cast({1} as bigint)), "
    "'%Y-%m-%d %H:%M:%S')"
)
_MEMBER = "case when {0} > 0 then printf('M%07d', {0}) end"


def _day(column: str) -> str:
    return f"case when {column} >= 0 then {_DAY.format(column)} end"


@dataclass(frozen=True)
class _Table:
    """How one table is put together.

    `tidy` holds numbers, days and categories, with the columns `filed_on` and `tie`; `shown` gives for each
    published column, in order, its SQL over `tidy`; `faulty` has those columns as text. `key` is the name of
    the published row number, counted in order of filing, and its printf pattern.
    """

    name: str
    key: tuple[str, str] | None
    shown: dict[str, str]
    types: dict[str, str]
    tidy: pd.DataFrame
    faulty: pd.DataFrame


def _filed(columns: dict[str, object], filed_on: Ints) -> pd.DataFrame:
    return pd.DataFrame({**columns, "filed_on": filed_on, "tie": np.arange(len(filed_on))})


def _members_table(joined: Ints, plan: Ints, paper: np.ndarray) -> _Table:
    tidy = _filed(
        {
            "member": np.arange(1, len(joined) + 1),
            "plan": _named(plan, PLANS),
            "joined": joined,
            "paper": _named(paper.astype(np.int64), ["no", "yes"]),
        },
        joined,
    )
    untidy = _Untidy(["member_id", "plan", "joined_on", "from_paper"], len(joined), _Dice(0, 0))
    last = _member_id(len(joined) + 1)
    untidy.repeat(iter([(_AS_OF, {"member_id": last, "plan": "individual", "from_paper": "no"})]))
    shown = {
        "member_id": _MEMBER.format("member"),
        "plan": "plan",
        "joined_on": _day("joined"),
        "from_paper": "paper",
    }
    return _Table("demo_members", None, shown, {}, tidy, untidy.frame(len(tidy)))


def _membership_rows(stints: Stints, dice: _Dice) -> tuple[Ints, Ints, Ints, Ints, Ints]:
    """Rows of the membership book: some stints are two rows that touch, where a card was replaced."""
    count = len(stints.member)
    known = np.where(stints.end < _AS_OF, stints.end, -1)
    announced = dice.chance(count, 0.02) & (stints.end >= _AS_OF) & (stints.end < _NEVER)
    end = np.where(announced, _AS_OF + dice.between(count, 5, 80), known)
    stop = np.where(known >= 0, known, _AS_OF - 1)
    length = np.maximum(stop - stints.start, 1)
    cut = stints.start + 1 + np.floor(dice.uniform(count) * (length - 1)).astype(np.int64)
    split = dice.chance(count, 0.05) & (length >= 60) & (cut < stop)
    reason = np.where(end >= 0, stints.reason, -1)
    return (
        np.concatenate([stints.member, stints.member[split]]),
        np.concatenate([stints.plan, stints.plan[split]]),
        np.concatenate([np.where(split, cut, stints.start), stints.start[split]]),
        np.concatenate([end, cut[split]]),
        np.concatenate([reason, np.full(int(split.sum()), -1)]),
    )


def _memberships_table(stints: Stints, members: int, dice: _Dice, dirt: _Dice) -> _Table:
    member, plan, start, end, reason = _membership_rows(stints, dice)
    late = np.where(dice.chance(len(member), 0.12), dice.between(len(member), 1, 30), 0)
    typed_in = np.where(start < _BEGAN, _BEGAN + dice.between(len(member), 0, 90), start) + late
    tidy = _filed(
        {
            "member": member,
            "plan": _named(plan, PLANS),
            "start": start,
            "finish": end,
            "reason": _named(reason, REASONS),
            "typed_in": typed_in,
            "minute": dice.between(len(member), 600, 1079),
        },
        typed_in,
    )
    columns = ["member_id", "plan", "started_on", "ended_on", "end_reason", "recorded_at"]
    untidy = _Untidy(columns, members, dirt)

    def row(member_id: str | None, started: str | None, ended: str | None, filed: int) -> TextRow:
        return {
            "member_id": member_id,
            "plan": PLANS[filed % 2],
            "started_on": started,
            "ended_on": ended,
            "end_reason": REASONS[filed % 4] if ended else None,
            "recorded_at": f"{_iso(filed)} 12:30:00",
        }

    untidy.add(2.0, lambda who, day: row(who, None, _iso(day + 30), day))
    untidy.add(1.7, lambda who, day: row(who, f"{_iso(day)[:4]}-13-40", None, day))
    untidy.add(1.0, lambda who, day: row(who, _iso(day), "end of season", day))
    untidy.add(2.3, lambda who, day: row(who, _iso(day), _iso(day - 9), day))
    untidy.add(1.0, lambda who, day: row(None, _iso(day), None, day))
    untidy.add(0.7, lambda who, day: row(who, _iso(_AS_OF + 20 + day % 40), None, day))
    untidy.repeat(_left_before_records(row, members, dirt))
    untidy.repeat(_entered_again(stints, row, _some(3.0, members), dirt))
    shown = {
        "member_id": _MEMBER.format("member"),
        "plan": "plan",
        "started_on": _day("start"),
        "ended_on": _day("finish"),
        "end_reason": "reason",
        "recorded_at": _MOMENT.format("typed_in", "minute"),
    }
    return _Table("demo_memberships", ("membership_id", "B%07d"), shown, {}, tidy, untidy.frame(len(tidy)))


def _left_before_records(
    row: Callable[..., TextRow], members: int, dice: _Dice
) -> Iterator[tuple[int, TextRow]]:
    """A few people who had left before records began were typed in by mistake."""
    count = _some(1.7, members)
    starts = dice.between(count, _OPENED, _BEGAN - 400)
    for number, start in enumerate(starts.tolist(), start=1):
        filed = _BEGAN + number % 90
        yield filed, row(_member_id(members + 1 + number), _iso(start), _iso(start + 60 + start % 300), filed)


def _entered_again(
    stints: Stints, row: Callable[..., TextRow], count: int, dice: _Dice
) -> Iterator[tuple[int, TextRow]]:
    """Memberships entered twice: half of them word for word, half with a start some days off (an overlap)."""
    finished = np.flatnonzero((stints.end < _AS_OF - 60) & (stints.end - stints.start > 40) & ~stints.paper)
    picked = finished[dice.between(count, 0, len(finished) - 1)] if len(finished) else finished
    for turn, place in enumerate(picked.tolist()):
        start = int(stints.start[place]) + (0 if turn % 2 else 1 + turn % 20)
        again = row(_member_id(stints.member[place]), _iso(start), _iso(stints.end[place]), start)
        yield (
            start,
            {
                **again,
                "plan": PLANS[int(stints.plan[place])],
                "end_reason": REASONS[int(stints.reason[place])],
            },
        )


def _status_table(stints: Stints, members: int, dice: _Dice, dirt: _Dice) -> _Table:
    """Changes of status: active, paused, active again, lapsed; members on paper are left out."""
    some = stints.pick(~stints.paper)
    count = len(some.member)
    stop = np.minimum(some.end, _AS_OF)
    pause = some.start + dice.between(count, 30, 330)
    resume = pause + dice.between(count, 14, 75)
    pauses = dice.chance(count, 0.14) & (resume < stop)
    left = some.end < _AS_OF
    statuses = ["active", "lapsed", "paused"]
    blocks = [
        (some.member, some.start, 0, np.full(count, -1), 0),
        (some.member[pauses], pause[pauses], 2, np.full(int(pauses.sum()), len(REASONS)), 1),
        (some.member[pauses], resume[pauses], 0, np.full(int(pauses.sum()), -1), 2),
        (some.member[left], some.end[left], 1, some.reason[left], 3),
    ]
    day = np.concatenate([block[1] for block in blocks])
    turn = np.concatenate([np.full(len(block[0]), block[4]) for block in blocks])
    member = np.concatenate([block[0] for block in blocks])
    order = np.lexsort((turn, member, day))
    tidy = _filed(
        {
            "member": member[order],
            "day": day[order],
            "status": _named(np.concatenate([np.full(len(b[0]), b[2]) for b in blocks])[order], statuses),
            "reason": _named(np.concatenate([b[3] for b in blocks])[order], [*REASONS, "away"]),
        },
        day[order],
    )
    untidy = _Untidy(["member_id", "effective_on", "status", "reason"], members, dirt)
    untidy.add(1.0, lambda who, day: {"member_id": who, "effective_on": _iso(day)})
    untidy.add(0.7, lambda who, day: {"member_id": who, "effective_on": "Tuesday", "status": "active"})
    untidy.add(0.7, lambda who, day: {"member_id": who, "status": "paused", "reason": "away"})
    untidy.add(0.7, lambda who, day: {"effective_on": _iso(day), "status": "lapsed", "reason": "moved"})
    strangers = _some(1.0, members)
    untidy.repeat(
        (
            _BEGAN + 40 * (number % 50),
            {
                "member_id": _member_id(members + 100 + number),
                "effective_on": _iso(_BEGAN + 40 * (number % 50)),
                "status": "lapsed",
                "reason": "unused",
            },
        )
        for number in range(strangers)
    )
    shown = {
        "member_id": _MEMBER.format("member"),
        "effective_on": _day("day"),
        "status": "status",
        "reason": "reason",
    }
    return _Table("demo_status_changes", ("change_number", ""), shown, {}, tidy, untidy.frame(len(tidy)))


def _roll_table(stints: Stints, members: int, dice: _Dice, dirt: _Dice) -> _Table:
    """Sunday's roll of every eighth who joined since it began; three sheets were lost, some rows missed."""
    some = stints.pick((stints.start >= _ROLL_STARTS) & (stints.member % 8 == 0) & ~stints.paper)
    sheets: list[tuple[Ints, Ints, Ints]] = []
    for sunday in range(_ROLL_STARTS, _ROLL_ENDS + 1, 7):
        on_roll = (some.start <= sunday) & (some.end > sunday)
        struck = (some.end <= sunday) & (some.end > sunday - 7)
        noted = (on_roll | struck) & ~dice.chance(len(on_roll), 0.015)
        if sunday in _LOST_SHEETS:
            continue
        who = some.member[noted]
        sheets.append((who, np.full(len(who), sunday), struck[noted].astype(np.int64)))
    day = np.concatenate([sheet[1] for sheet in sheets])
    tidy = _filed(
        {
            "member": np.concatenate([sheet[0] for sheet in sheets]),
            "day": day,
            "status": _named(np.concatenate([sheet[2] for sheet in sheets]), ["member", "struck off"]),
        },
        day,
    )
    untidy = _Untidy(["member_id", "sheet_on", "status"], members, dirt)
    untidy.add(0.7, lambda who, day: {"sheet_on": _iso(_ROLL_STARTS + 7), "status": "member"})
    untidy.add(0.7, lambda who, day: {"member_id": who, "sheet_on": "Sunday", "status": "member"})
    shown = {"member_id": _MEMBER.format("member"), "sheet_on": _day("day"), "status": "status"}
    return _Table("demo_sunday_roll", ("roll_row", ""), shown, {}, tidy, untidy.frame(len(tidy)))


_LEAVING = ["moved away", "too dear", "not using it", "left"]


def _desk_table(stints: Stints, members: int, dice: _Dice, dirt: _Dice) -> _Table:
    """The front desk's log, kept since records began: joins in the morning, leaving in the afternoon."""
    some = stints.pick(~stints.paper)
    first = np.concatenate([[True], some.member[1:] != some.member[:-1]]) if len(some.member) else some.paper
    left = some.end < _AS_OF
    kinds = ["joined", "rejoined", *_LEAVING]
    day = np.concatenate([some.start, some.end[left]])
    morning = dice.between(len(some.member), 600, 779)
    afternoon = dice.between(int(left.sum()), 840, 1079)
    tidy = _filed(
        {
            "member": np.concatenate([some.member, some.member[left]]),
            "day": day,
            "minute": np.concatenate([morning, afternoon]),
            "kind": _named(np.concatenate([np.where(first, 0, 1), 2 + some.reason[left]]), kinds),
        },
        day,
    )
    untidy = _Untidy(["member_id", "logged_at", "kind"], members, dirt)

    def entry(who: str | None, day: int, kind: str | None, time: str = "13:30:00") -> TextRow:
        return {"member_id": who, "logged_at": f"{_iso(day)} {time}", "kind": kind}

    untidy.add(4.0, lambda who, day: entry(who, day, "lost card"))
    untidy.add(1.0, lambda who, day: entry(who, day, None))
    untidy.add(0.7, lambda who, day: {**entry(who, day, "joined"), "logged_at": "after lunch"})
    untidy.add(0.7, lambda who, day: {**entry(who, day, "left"), "logged_at": None})
    untidy.add(0.7, lambda who, day: entry(None, day, "joined"))
    untidy.repeat(_logged_again(some, _some(4.0, members), dirt))
    shown = {
        "member_id": _MEMBER.format("member"),
        "logged_at": _MOMENT.format("day", "minute"),
        "kind": "kind",
    }
    return _Table("demo_desk_log", ("log_number", ""), shown, {}, tidy, untidy.frame(len(tidy)))


def _logged_again(some: Stints, count: int, dice: _Dice) -> Iterator[tuple[int, TextRow]]:
    """Members who were signed off twice, signed up twice, or signed off before anybody signed them up."""
    finished = np.flatnonzero((some.end < _AS_OF - 10) & (some.end - some.start > 20))
    picked = finished[dice.between(count, 0, len(finished) - 1)] if len(finished) else finished
    for turn, place in enumerate(picked.tolist()):
        day, kind = [
            (int(some.end[place]), "left"),
            (int(some.start[place]) + 5, "joined"),
            (int(some.start[place]) - 3, "moved away"),
        ][turn % 3]
        who = _member_id(some.member[place])
        yield day, {"member_id": who, "logged_at": f"{_iso(day)} 18:05:00", "kind": kind}


def _loan_days(stints: Stints, dice: _Dice) -> tuple[Ints, Ints]:
    """Member and day of every loan: one round for the first of each stint, one for each next."""
    stop = np.minimum(stints.end, _AS_OF)
    member, plan, day = stints.member, stints.plan, stints.start
    member_rounds: list[Ints] = []
    day_rounds: list[Ints] = []
    tables = _FIRST_LOAN
    for _ in range(60):
        nothing_yet = np.zeros(len(member), dtype=np.int64)
        brisk, slow = dice.waits(tables[0], nothing_yet), dice.waits(tables[1], nothing_yet)
        wait = np.where(plan == 0, brisk, slow)
        day = _opening_day(day + wait + (0 if tables is _FIRST_LOAN else 1))
        goes_on = (wait < len(tables[0])) & (day < stop) & (day < _AS_OF)
        member, plan, day, stop = member[goes_on], plan[goes_on], day[goes_on], stop[goes_on]
        recorded = day >= _BEGAN
        member_rounds.append(member[recorded])
        day_rounds.append(day[recorded])
        tables = _NEXT_LOAN
    return np.concatenate(member_rounds), np.concatenate(day_rounds)


def _loans_table(stints: Stints, members: int, dice: _Dice, dirt: _Dice) -> _Table:
    member, day = _loan_days(stints, dice)
    order = np.lexsort((member, day))
    minute = 780 + 5 * dice.between(len(member), 0, 60)
    tidy = _filed(
        {
            "member": member[order],
            "day": day[order],
            "minute": minute,
            "tool_kind": _named(dice.choose(len(member), (0.27, 0.34, 0.11, 0.28)), TOOL_KINDS),
        },
        day[order],
    )
    untidy = _Untidy(["member_id", "lent_at", "tool_kind"], members, dirt)
    untidy.add(2.0, lambda who, day: {"lent_at": f"{_iso(day)} 14:00:00", "tool_kind": "hand"})
    untidy.add(1.3, lambda who, day: {"member_id": who, "tool_kind": "power"})
    untidy.add(
        1.0,
        lambda who, day: {"member_id": who, "lent_at": f"{_iso(_AS_OF + 184)} 10:00:00", "tool_kind": "hand"},
    )
    shown = {
        "member_id": _MEMBER.format("member"),
        "lent_at": _MOMENT.format("day", "minute"),
        "tool_kind": "tool_kind",
    }
    types = {"lent_at": "timestamp"}
    return _Table("demo_loans", ("loan_id", "L%07d"), shown, types, tidy, untidy.frame(len(tidy)))


def _parts_table(members: int, dice: _Dice, dirt: _Dice) -> _Table:
    """Parts of workshop machines: hours run, worn out or not, hours on the meter when readings began."""
    count = max(60, members // 6)
    part = dice.choose(count, (0.30, 0.34, 0.36))
    metered = np.where(dice.chance(count, 0.15), dice.between(count, 20, 150), 0)
    lasts = np.select(
        [part == 0, part == 1],
        [dice.waits(_PART_LASTS[0], metered), dice.waits(_PART_LASTS[1], metered)],
        dice.waits(_PART_LASTS[2], metered),
    )
    in_use = metered + dice.between(count, 30, 1_400)
    filed_on = _BEGAN + np.arange(count) * (_AS_OF - _BEGAN - 1) // count
    tidy = _filed(
        {
            "part": _named(part, PARTS),
            "bench": dice.between(count, 1, 9),
            "hours": np.minimum(lasts, in_use),
            "worn": _named((lasts <= in_use).astype(np.int64), ["0", "1"]),
            "metered": metered,
        },
        filed_on,
    )
    untidy = _Untidy(["part", "bench", "hours_run", "worn_out", "hours_before_meter"], members, dirt)

    def reading(day: int, hours: str | None, worn: str | None, before: str | None) -> TextRow:
        return {
            "part": PARTS[day % 3],
            "bench": f"bench {1 + day % 9}",
            "hours_run": hours,
            "worn_out": worn,
            "hours_before_meter": before,
        }

    untidy.add(0.7, lambda who, day: reading(day, None, "1", "0"))
    untidy.add(0.7, lambda who, day: reading(day, "-40", "0", "0"))
    untidy.add(0.7, lambda who, day: reading(day, "about 300", "1", "0"))
    untidy.add(0.7, lambda who, day: reading(day, "212", "maybe", "0"))
    untidy.add(0.7, lambda who, day: reading(day, "90", "1", "140"))
    shown = {
        "part": "part",
        "bench": "printf('bench %d', bench)",
        "hours_run": "cast(hours as varchar)",
        "worn_out": "worn",
        "hours_before_meter": "cast(metered as varchar)",
    }
    return _Table("demo_machine_parts", ("part_id", "P%06d"), shown, {}, tidy, untidy.frame(len(tidy)))


TABLES: tuple[str, ...] = (
    "demo_members",
    "demo_memberships",
    "demo_status_changes",
    "demo_sunday_roll",
    "demo_desk_log",
    "demo_loans",
    "demo_machine_parts",
)


def _tables(members: int, seed: int) -> Iterator[_Table]:
    """The tables in the order of TABLES, one at a time, so that only one is held in memory."""
    joined, plan, paper = _members(members, _Dice(seed, 1))
    yield _members_table(joined, plan, paper)
    stints = _stints(joined, plan, paper, _Dice(seed, 2))
    yield _memberships_table(stints, members, _Dice(seed, 3), _Dice(seed, 13))
    yield _status_table(stints, members, _Dice(seed, 4), _Dice(seed, 14))
    yield _roll_table(stints, members, _Dice(seed, 5), _Dice(seed, 15))
    yield _desk_table(stints, members, _Dice(seed, 6), _Dice(seed, 16))
    yield _loans_table(stints, members, _Dice(seed, 7), _Dice(seed, 17))
    yield _parts_table(members, _Dice(seed, 8), _Dice(seed, 18))


def _write(connection: duckdb.DuckDBPyConnection, schema: str, table: _Table) -> None:
    names = list(table.shown)
    tidy = ", ".join(f"cast({sql} as varchar) as {name}" for name, sql in table.shown.items())
    faulty = ", ".join(f"cast({name} as varchar) as {name}" for name in names)
    columns = [f"cast({name} as {table.types.get(name, 'varchar')}) as {name}" for name in names]
    if table.key is not None:
        name, pattern = table.key
        number = "row_number() over (order by filed_on, tie)"
        key = f"printf('{pattern}', {number})" if pattern else f"cast({number} as integer)"
        columns.insert(0, f"{key} as {name}")
    connection.register("tidy_rows", table.tidy)
    connection.register("faulty_rows", table.faulty)
    connection.execute(
        f'create or replace table "{schema}"."{table.name}" as '
        f"select {', '.join(columns)} from ("
        f"select {tidy}, filed_on, tie from tidy_rows "
        f"union all select {faulty}, filed_on, tie from faulty_rows"
        ") as filed order by filed_on, tie"
    )
    connection.unregister("tidy_rows")
    connection.unregister("faulty_rows")


def write_tables(
    connection: duckdb.DuckDBPyConnection,
    schema: str,
    members: int = DEFAULT_MEMBERS,
    seed: int = DEFAULT_SEED,
    on_table: Callable[[str], None] = lambda name: None,
) -> None:
    """Writes the demo's source tables, under the names of the seeds, into a schema of a DuckDB database.

    Existing tables of those names are replaced. Raises ValueError if `members` is outside
    FEWEST_MEMBERS … MOST_MEMBERS or `seed` is negative.
    """
    if not FEWEST_MEMBERS <= members <= MOST_MEMBERS:
        raise ValueError(
            f"members is {members:,}; give a number from {FEWEST_MEMBERS:,} to {MOST_MEMBERS:,}."
        )
    if seed < 0:
        raise ValueError(f"seed is {seed}; give 0 or a positive whole number.")
    connection.execute(f'create schema if not exists "{schema}"')
    for table in _tables(members, seed):
        on_table(table.name)
        _write(connection, schema, table)


def write_seeds(folder: Path, members: int = DEFAULT_MEMBERS, seed: int = DEFAULT_SEED) -> list[Path]:
    """Writes the demo's source tables as CSV files into an existing folder; gives their paths."""
    import duckdb  # not at the top, for the command line's sake: it reads this module's defaults

    paths = []
    with duckdb.connect() as connection:
        write_tables(connection, "main", members, seed)
        for name in TABLES:
            rows = connection.execute(f'select * from "{name}"')
            path = folder / f"{name}.csv"
            with path.open("w", encoding="utf-8", newline="") as file:
                out = csv.writer(file, lineterminator="\n")
                out.writerow([column[0] for column in rows.description or []])
                out.writerows(rows.fetchall())
            paths.append(path)
    return paths


if __name__ == "__main__":
    for written in write_seeds(Path("seeds/demo")):
        print(written)
