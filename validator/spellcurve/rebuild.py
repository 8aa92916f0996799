"""The six spell builders once more, in plain Python: slow, obvious, written from the rules alone.

Every builder takes its source rows as dicts and returns two lists of dicts: the sound spells and the source
rows that were refused. Each source row is in exactly one of the two.

Where the rules leave a choice open, the choice taken here is: rows that tie on everything the rules order by
keep the order of the input; among several causes that tie, null yields to text; a null sequence comes last;
a censored spell whose last known moment lies before observe_from was never under observation, and is refused
like one that ended there.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date, datetime, timedelta, timezone
from decimal import Decimal
from typing import Any

Row = Mapping[str, Any]
Table = list[dict[str, Any]]

UNITS = ("day", "week", "month", "hour", "minute")
SPELL_COLUMNS = (
    "subject_id",
    "spell_number",
    "started_at",
    "last_seen_at",
    "entry",
    "duration",
    "event",
    "cause",
    "weight",
)
FAULTY_COLUMNS = ("subject_id", "given_start", "given_end", "given_kind", "fault", "detail")

FAULTS = {
    "unreadable_recorded_at": "The moment of recording is no date or timestamp; correct it in the source.",
    "recorded_after_as_of": "The row was recorded after as_of, so it was not known then.",
    "no_subject": "The row has no subject; give it one in the source.",
    "no_start": "The row has no start; give it one in the source.",
    "unreadable_start": "The start is no date or timestamp; correct it in the source.",
    "starts_after_as_of": "The row starts after as_of, so it did not exist then.",
    "unreadable_end": "The end is no date or timestamp; correct it in the source.",
    "ends_before_start": "The row ends before it starts; correct either in the source.",
    "duplicate_row": "The row repeats another row of its subject; remove it from the source.",
    "overlaps_earlier": "The row starts before an earlier row of its subject has ended; correct either.",
    "no_time": "The row has no time; give it one in the source.",
    "unreadable_time": "The time is no date or timestamp; correct it in the source.",
    "after_as_of": "The row happened after as_of, so it was not known then.",
    "no_kind": "The row has no kind; give it one in the source.",
    "unknown_kind": "The kind neither opens nor closes a spell; list it under opens or closes.",
    "already_open": "The row opens a spell while one is open; look for a closing row that is missing.",
    "nothing_open": "The row closes a spell while none is open; look for an opening row that is missing.",
    "no_status": "The row has no status; give it one in the source.",
    "conflicting_status": "The subject has active and inactive statuses at this one moment; keep either.",
    "no_origin": "The event has no sound origin of its subject at or before it; look for a missing origin.",
    "no_duration": "The row has no duration; give it one in the source.",
    "unreadable_duration": "The duration is no number; correct it in the source.",
    "negative_duration": "The duration is below 0; correct it in the source.",
    "duration_not_whole": "The duration is not a whole number of units; round it down in the source.",
    "no_event": "The row does not say whether the event happened; give it 0 or 1 in the source.",
    "unreadable_event": "The event is neither 0 or 1 nor true or false; correct it in the source.",
    "unreadable_entry": "The entry is no number; correct it in the source.",
    "negative_entry": "The entry is below 0; correct it in the source.",
    "entry_not_whole": "The entry is not a whole number of units; round it down in the source.",
    "entry_after_duration": "The entry is above the duration; correct either in the source.",
    "no_weight": "The row has no weight; give it one in the source.",
    "unreadable_weight": "The weight is no number; correct it in the source.",
    "weight_not_positive": "The weight is not above 0; correct it in the source.",
    "starts_within_grace": "The spell starts too close to as_of for its end to be known for certain.",
    "ended_before_observation": "The spell was last seen before observe_from, so it was never observed.",
}


# Values as sources keep them


_MOMENT = re.compile(
    r"([0-9]{4}-[0-9]{2}-[0-9]{2})(?:[ T]([0-9]{2}:[0-9]{2})(?:(:[0-9]{2})(?:\.([0-9]{1,6}))?)?)?"
)
_NUMBER = re.compile(r" *[+-]?([0-9]+(\.[0-9]*)?|\.[0-9]+)([eE][+-]?[0-9]+)? *")
_TRUE, _FALSE = ("1", "true", "t"), ("0", "false", "f")


def read_moment(value: Any) -> datetime | None:
    """Read a date or timestamp; a date is the moment at which it begins, None stays None.

    Raises:
        ValueError: the value is neither a date, a timestamp without zone, nor text of the form
            ``YYYY-MM-DD`` or ``YYYY-MM-DD HH:MM[:SS[.ffffff]]`` (a ``T`` may stand for the space).
    """
    if value is None:
        return None
    if isinstance(value, datetime) and value.tzinfo is None:
        return value
    if isinstance(value, date) and not isinstance(value, datetime):
        return datetime(value.year, value.month, value.day)
    match = _MOMENT.fullmatch(value) if isinstance(value, str) else None
    if match:
        day, minute, second, fraction = match.groups(default="")
        return datetime.fromisoformat(f"{day}T{minute or '00:00'}{second or ':00'}.{fraction:0<6}")
    raise ValueError(f"{value!r} is no date or timestamp; write YYYY-MM-DD or YYYY-MM-DD HH:MM:SS.")


def read_number(value: Any) -> Decimal | None:
    """Read a number, None stays None; raise ValueError for anything that is no finite number."""
    if value is None:
        return None
    if not _NUMBER.fullmatch(str(value)):
        raise ValueError(f"{value!r} is no number.")
    return Decimal(str(value).strip())


def read_event(value: Any) -> int | None:
    """Read a 0 or 1, also written true, false, t or f in any case; raise ValueError for anything else."""
    if value is None:
        return None
    given = value.lower() if isinstance(value, str) else value
    if given in _TRUE or given == 1:
        return 1
    if given in _FALSE or given == 0:
        return 0
    raise ValueError(f"{value!r} is neither 0 nor 1.")


def _as_text(value: Any) -> str | None:
    """Write a raw value as a warehouse's cast to text does."""
    if value is None:
        return None
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, datetime) and value.microsecond:
        return str(value).rstrip("0")
    return str(value)


def _readable(reader: Callable[[Any], Any], value: Any) -> bool:
    try:
        reader(value)
    except ValueError:
        return False
    return True


# Units


def completed_units(start: datetime, end: datetime, unit: str) -> int:
    """Count the completed units from one moment to a later one."""
    if unit == "day":
        return (end.date() - start.date()).days
    if unit == "week":
        return (end.date() - start.date()).days // 7
    if unit == "month":
        months = 12 * (end.year - start.year) + end.month - start.month
        return months - 1 if end.day < start.day else months
    return (end - start) // (timedelta(hours=1) if unit == "hour" else timedelta(minutes=1))


@dataclass(frozen=True)
class _Rules:
    """The options that all builders share, read and checked."""

    as_of: datetime
    observe_from: datetime | None
    recorded_at: str | None
    unit: str
    carry: tuple[str, ...]
    source_rows: bool
    unnamed_cause: str

    @property
    def day_based(self) -> bool:
        return self.unit in ("day", "week", "month")

    def span(self, length: int) -> timedelta:
        """Turn a grace or lapse_after into time."""
        if self.day_based:
            return timedelta(days=length)
        return timedelta(hours=length) if self.unit == "hour" else timedelta(minutes=length)

    def before(self, one: datetime, other: datetime) -> bool:
        return one.date() < other.date() if self.day_based else one < other

    def gap(self, end: datetime, start: datetime) -> timedelta:
        return start.date() - end.date() if self.day_based else start - end

    def counted_from(self, moment: datetime) -> datetime:
        """Where counting begins: at the start of the day where days are counted."""
        return datetime.combine(moment.date(), datetime.min.time()) if self.day_based else moment

    def cause(self, given: str | None) -> str:
        return self.unnamed_cause if given is None else given

    def as_kept(self, moment: datetime) -> date | datetime:
        return moment.date() if self.day_based else moment


def _rules(
    as_of: Any,
    observe_from: Any,
    recorded_at: str | None,
    unit: str,
    carry: Sequence[str],
    source_rows: bool,
    cause_given: bool,
) -> _Rules:
    _check_choice("unit", unit, UNITS)
    start_of_today = datetime.combine(datetime.now(timezone.utc).date(), datetime.min.time())
    known_at = read_moment(as_of) or start_of_today
    observed_from = read_moment(observe_from)
    if observed_from is not None and observed_from > known_at:
        raise ValueError(f"observe_from {observed_from} is after as_of {known_at}; give an earlier one.")
    unnamed = "unknown" if cause_given else "event"
    return _Rules(known_at, observed_from, recorded_at, unit, tuple(carry), source_rows, unnamed)


def _check_choice(option: str, given: str, allowed: Sequence[str]) -> None:
    if given not in allowed:
        raise ValueError(f"{option} is {given!r}; give one of {', '.join(allowed)}.")


def _check_length(option: str, given: Any, least: int) -> None:
    if not isinstance(given, int) or isinstance(given, bool) or given < least:
        raise ValueError(f"{option} is {given!r}; give a whole number of at least {least}.")


# Source rows, pieces and the ledger in which they end


@dataclass
class _Source:
    """A source row with the raw values that a refusal shows."""

    row: Row
    subject: Any
    given_start: Any
    given_end: Any = None
    given_kind: Any = None
    carries: bool = True


@dataclass
class _Piece:
    """A stretch of one subject; merged pieces make a spell. An end of None is open."""

    subject: Any
    start: datetime
    end: datetime | None
    cause: str | None
    sources: list[_Source]


@dataclass
class _Ledger:
    """The two outputs of a builder."""

    rules: _Rules
    sound: Table = field(default_factory=list)
    faulty: Table = field(default_factory=list)

    def refuse(self, source: _Source, fault: str) -> None:
        refused = {
            "subject_id": source.subject,
            "given_start": _as_text(source.given_start),
            "given_end": _as_text(source.given_end),
            "given_kind": _as_text(source.given_kind),
            "fault": fault,
            "detail": FAULTS[fault],
        }
        for column in self.rules.carry:
            refused[column] = source.row[column] if source.carries else None
        self.faulty.append(refused)

    def passes(self, source: _Source, *faults: str | None) -> bool:
        """Refuse the row for the first fault there is; say whether there was none."""
        first = next((fault for fault in faults if fault), None)
        if first:
            self.refuse(source, first)
        return first is None

    def accept(self, spell: _Piece, number: int, last_seen: datetime, censored: bool) -> None:
        rules = self.rules
        duration = completed_units(spell.start, last_seen, rules.unit)
        entry = 0
        if rules.observe_from is not None and spell.start < rules.observe_from:
            entry = completed_units(spell.start, rules.observe_from, rules.unit)
        values = (
            spell.subject,
            number,
            rules.as_kept(spell.start),
            rules.as_kept(last_seen),
            entry,
            duration,
            0 if censored else 1,
            None if censored else rules.cause(spell.cause),
            1,
        )
        accepted = dict(zip(SPELL_COLUMNS, values, strict=True))
        if rules.source_rows:
            accepted["source_rows"] = len(spell.sources)
        for column in rules.carry:
            accepted[column] = spell.sources[0].row[column]
        self.sound.append(accepted)


def _record_fault(row: Row, rules: _Rules) -> str | None:
    if rules.recorded_at is None:
        return None
    return _time_fault(
        row[rules.recorded_at], rules.as_of, None, "unreadable_recorded_at", "recorded_after_as_of"
    )


def _time_fault(value: Any, as_of: datetime, none: str | None, unreadable: str, after: str) -> str | None:
    if value is None:
        return none
    if not _readable(read_moment, value):
        return unreadable
    moment = read_moment(value)
    return after if moment is not None and moment > as_of else None


def _end_fault(start: Any, end: Any, rules: _Rules) -> str | None:
    """Find what is wrong with the end of a row; of a row whose start is wrong already, nothing."""
    if not _readable(read_moment, end):
        return "unreadable_end"
    if not _readable(read_moment, start):
        return None
    started, ended = read_moment(start), read_moment(end)
    backwards = started is not None and ended is not None and rules.before(ended, started)
    return "ends_before_start" if backwards else None


def _known_end(value: Any, rules: _Rules) -> datetime | None:
    """Read an end; one after as_of is not known yet."""
    end = read_moment(value)
    return None if end is not None and end > rules.as_of else end


def _moment(value: Any) -> datetime:
    moment = read_moment(value)
    assert moment is not None
    return moment


def _by_subject(things: Iterable[Any]) -> list[list[Any]]:
    """Sort sources or pieces into their subjects."""
    subjects: dict[Any, list[Any]] = {}
    for thing in things:
        subjects.setdefault(thing.subject, []).append(thing)
    return list(subjects.values())


def _end_last(piece: _Piece) -> tuple[datetime, datetime]:
    """Order by start, then end, open ends last."""
    return piece.start, piece.end or datetime.max


def _merge(pieces: Iterable[_Piece], grace: int, rules: _Rules) -> list[_Piece]:
    """Join the pieces of each subject whose gap to the furthest end so far is within grace."""
    spells = []
    for own in _by_subject(pieces):
        members: list[_Piece] = []
        furthest: datetime | None = None
        for piece in sorted(own, key=lambda piece: piece.start):
            open_or_near = furthest is None or rules.gap(furthest, piece.start) <= rules.span(grace)
            if members and not open_or_near:
                spells.append(_joined(members))
                members = []
            if not members:
                furthest = piece.end
            elif furthest is not None:
                furthest = None if piece.end is None else max(furthest, piece.end)
            members.append(piece)
        spells.append(_joined(members))
    return spells


def _joined(members: list[_Piece]) -> _Piece:
    """Make one spell of its pieces: its cause is that of the piece which ends last."""
    first = members[0]
    sources = [source for piece in members for source in piece.sources]
    ends = [piece.end for piece in members if piece.end is not None]
    if len(ends) < len(members):
        return _Piece(first.subject, first.start, None, None, sources)
    causes = [piece.cause for piece in members if piece.end == max(ends) and piece.cause is not None]
    return _Piece(first.subject, first.start, max(ends), min(causes, default=None), sources)


def _finish(spells: Iterable[_Piece], cut: datetime, ledger: _Ledger) -> None:
    """Apply what is known of whole spells: censor at the cut, refuse, number per subject."""
    rules = ledger.rules
    for own in _by_subject(spells):
        number = 0
        for spell in sorted(own, key=_end_last):
            censored = spell.end is None or spell.end > cut
            last_seen = cut if spell.end is None or censored else spell.end
            fault = None
            if spell.start > cut:
                fault = "starts_within_grace"
            elif rules.observe_from and rules.before(last_seen, rules.observe_from):
                fault = "ended_before_observation"
            if fault:
                for source in spell.sources:
                    ledger.refuse(source, fault)
            else:
                number += 1
                ledger.accept(spell, number, last_seen, censored)


# The builders


def spells_from_intervals(
    relation: Iterable[Row],
    subject: str,
    started: str,
    ended: str,
    cause: str | None = None,
    grace: int = 0,
    overlaps: str = "merge",
    as_of: Any = None,
    observe_from: Any = None,
    recorded_at: str | None = None,
    unit: str = "day",
    carry: Sequence[str] = (),
    source_rows: bool = False,
) -> tuple[Table, Table]:
    """Rebuild spells from rows that have a start and an end; returns (sound, faulty)."""
    rules = _rules(as_of, observe_from, recorded_at, unit, carry, source_rows, cause is not None)
    _check_length("grace", grace, 0)
    _check_choice("overlaps", overlaps, ("merge", "keep", "refuse"))
    if grace and overlaps != "merge":
        raise ValueError(f"grace is {grace} with overlaps {overlaps!r}; grace needs overlaps 'merge'.")
    ledger = _Ledger(rules)
    pieces = []
    for row in relation:
        source = _Source(row, row[subject], row[started], row[ended], row[cause] if cause else None)
        if ledger.passes(
            source,
            _record_fault(row, rules),
            "no_subject" if row[subject] is None else None,
            _time_fault(row[started], rules.as_of, "no_start", "unreadable_start", "starts_after_as_of"),
            _end_fault(row[started], row[ended], rules),
        ):
            end = _known_end(row[ended], rules)
            why = _as_text(source.given_kind)
            pieces.append(_Piece(row[subject], _moment(row[started]), end, why, [source]))
    if overlaps == "merge":
        pieces = _merge(pieces, grace, rules)
    elif overlaps == "refuse":
        pieces = _without_overlaps(pieces, ledger)
    _finish(pieces, rules.as_of - rules.span(grace), ledger)
    return ledger.sound, ledger.faulty


def _without_overlaps(pieces: Iterable[_Piece], ledger: _Ledger) -> list[_Piece]:
    """Refuse duplicates, and rows which start before any earlier row of their subject has ended."""
    kept = []
    for own in _by_subject(pieces):
        earlier: list[_Piece] = []
        for piece in sorted(own, key=_end_last):
            if any(_end_last(other) == _end_last(piece) for other in earlier):
                ledger.refuse(piece.sources[0], "duplicate_row")
            elif any(other.end is None or ledger.rules.before(piece.start, other.end) for other in earlier):
                ledger.refuse(piece.sources[0], "overlaps_earlier")
            else:
                kept.append(piece)
            earlier.append(piece)
    return kept


def spells_from_event_log(
    relation: Iterable[Row],
    subject: str,
    happened: str,
    kind: str,
    opens: str | Sequence[str],
    closes: str | Sequence[str] | Mapping[str, str],
    sequence: str | None = None,
    grace: int = 0,
    as_of: Any = None,
    observe_from: Any = None,
    recorded_at: str | None = None,
    unit: str = "day",
    carry: Sequence[str] = (),
    source_rows: bool = False,
) -> tuple[Table, Table]:
    """Rebuild spells from rows that open and close them; returns (sound, faulty)."""
    causes: Mapping[str, str | None] = (
        closes if isinstance(closes, Mapping) else dict.fromkeys(_listed(closes), "event")
    )
    opening = _listed(opens)
    if set(opening) & set(causes):
        raise ValueError("The same kind is listed under opens and closes; list it under one of them.")
    rules = _rules(as_of, observe_from, recorded_at, unit, carry, source_rows, isinstance(closes, Mapping))
    _check_length("grace", grace, 0)
    ledger = _Ledger(rules)
    valid = []
    for row in relation:
        source = _Source(row, row[subject], row[happened], None, row[kind])
        unknown = row[kind] is not None and _as_text(row[kind]) not in {*opening, *causes}
        if ledger.passes(
            source,
            _record_fault(row, rules),
            "no_subject" if row[subject] is None else None,
            _time_fault(row[happened], rules.as_of, "no_time", "unreadable_time", "after_as_of"),
            "no_kind" if row[kind] is None else None,
            "unknown_kind" if unknown else None,
        ):
            valid.append(source)
    pieces = []
    for own in _by_subject(valid):
        pieces += _replay(_by_moment(own, sequence), set(opening), causes, ledger)
    _finish(_merge(pieces, grace, rules), rules.as_of - rules.span(grace), ledger)
    return ledger.sound, ledger.faulty


def _listed(names: str | Sequence[str]) -> list[str]:
    return [names] if isinstance(names, str) else list(names)


def _by_moment(sources: Iterable[_Source], sequence: str | None) -> list[tuple[datetime, list[_Source]]]:
    """Sort one subject's rows into moments (and sequences), in order of time."""
    moments: dict[Any, list[_Source]] = {}
    for source in sources:
        place = source.row[sequence] if sequence else None
        key = (_moment(source.given_start), place is None, 0 if place is None else place)
        moments.setdefault(key, []).append(source)
    return [(key[0], moments[key]) for key in sorted(moments)]


def _replay(
    moments: Iterable[tuple[datetime, list[_Source]]],
    opening: set[str],
    causes: Mapping[str, str | None],
    ledger: _Ledger,
) -> list[_Piece]:
    """Go through one subject's log and note each stretch between an opening and a closing row."""
    pieces: list[_Piece] = []
    is_open = False
    for moment, sources in moments:
        for source in _in_order(sources, opening, is_open, ledger):
            opens = _as_text(source.given_kind) in opening
            if opens and is_open:
                ledger.refuse(source, "already_open")
            elif opens:
                pieces.append(_Piece(source.subject, moment, None, None, [source]))
            elif not is_open:
                ledger.refuse(source, "nothing_open")
            else:
                pieces[-1].end = moment
                pieces[-1].cause = causes[str(_as_text(source.given_kind))]
                pieces[-1].sources.append(source)
            is_open = opens
    return pieces


def _in_order(sources: Iterable[_Source], opening: set[str], is_open: bool, ledger: _Ledger) -> list[_Source]:
    """Order the rows of one moment: what changes the present state first, then by kind; duplicates go."""
    first_of_kind: dict[str, _Source] = {}
    for source in sources:
        kind = str(_as_text(source.given_kind))
        if kind in first_of_kind:
            ledger.refuse(source, "duplicate_row")
        else:
            first_of_kind[kind] = source
    kinds = sorted(first_of_kind, key=lambda kind: ((kind in opening) == is_open, kind))
    return [first_of_kind[kind] for kind in kinds]


def spells_from_status_history(
    relation: Iterable[Row],
    subject: str,
    effective: str,
    status: str,
    active: str | Sequence[str],
    grace: int = 0,
    ended: str | None = None,
    cause: str | None = None,
    sequence: str | None = None,
    shape: str = "changes",
    as_of: Any = None,
    observe_from: Any = None,
    recorded_at: str | None = None,
    unit: str = "day",
    carry: Sequence[str] = (),
    source_rows: bool = False,
) -> tuple[Table, Table]:
    """Rebuild spells from rows that say which status a subject has; returns (sound, faulty)."""
    rules = _rules(as_of, observe_from, recorded_at, unit, carry, source_rows, cause is not None)
    _check_length("grace", grace, 0)
    _check_choice("shape", shape, ("changes", "snapshots"))
    if shape == "snapshots" and (ended or sequence):
        raise ValueError("shape 'snapshots' takes neither ended nor sequence; leave them out.")
    ledger = _Ledger(rules)
    valid = []
    for row in relation:
        end = row[ended] if ended else None
        source = _Source(row, row[subject], row[effective], end, row[status])
        if ledger.passes(
            source,
            _record_fault(row, rules),
            "no_subject" if row[subject] is None else None,
            _time_fault(row[effective], rules.as_of, "no_time", "unreadable_time", "after_as_of"),
            "no_status" if row[status] is None else None,
            _end_fault(row[effective], end, rules),
        ):
            valid.append(source)
    calendar = sorted({_moment(source.given_start).date() for source in valid})
    if shape == "changes":
        calendar = []
    pieces = []
    for own in _by_subject(valid):
        moments = _by_moment(own, sequence) if shape == "changes" else _by_date(own)
        settled = _without_conflicts(moments, set(_listed(active)), ledger)
        pieces += _held(settled, cause, calendar, ledger)
    known_until = rules.as_of
    if calendar:
        known_until = min(known_until, _moment(calendar[-1]))
    _finish(_merge(pieces, grace, rules), known_until - rules.span(grace), ledger)
    return ledger.sound, ledger.faulty


def _by_date(sources: Iterable[_Source]) -> list[tuple[datetime, list[_Source]]]:
    dates: dict[date, list[_Source]] = {}
    for source in sources:
        dates.setdefault(_moment(source.given_start).date(), []).append(source)
    return [(_moment(day), dates[day]) for day in sorted(dates)]


@dataclass
class _Attested:
    """What one subject's rows of one moment agree on."""

    moment: datetime
    is_active: bool
    sources: list[_Source]


def _without_conflicts(
    moments: Iterable[tuple[datetime, list[_Source]]], active: set[str], ledger: _Ledger
) -> list[_Attested]:
    settled = []
    for moment, sources in moments:
        verdicts = {_as_text(source.given_kind) in active for source in sources}
        if len(verdicts) == 1:
            settled.append(_Attested(moment, verdicts.pop(), sources))
        else:
            for source in sources:
                ledger.refuse(source, "conflicting_status")
    return settled


def _held(
    settled: Sequence[_Attested], cause: str | None, calendar: Sequence[date], ledger: _Ledger
) -> list[_Piece]:
    """Let each active row last until the next row, its own end, or the next date of the calendar."""
    pieces: list[_Piece] = []
    for place, attested in enumerate(settled):
        following = settled[place + 1] if place + 1 < len(settled) else None
        if attested.is_active:
            why = _cause_after(following, cause)
            for source in attested.sources:
                end = _end_of_status(source, attested.moment, following, calendar, ledger.rules)
                pieces.append(_Piece(source.subject, attested.moment, end, why, [source]))
        elif pieces:
            pieces[-1].sources += attested.sources
        else:
            for source in attested.sources:
                ledger.refuse(source, "nothing_open")
    return pieces


def _cause_after(following: _Attested | None, cause: str | None) -> str | None:
    if following is None or following.is_active or cause is None:
        return None
    given = [_as_text(source.row[cause]) for source in following.sources]
    return min((text for text in given if text is not None), default=None)


def _end_of_status(
    source: _Source,
    moment: datetime,
    following: _Attested | None,
    calendar: Sequence[date],
    rules: _Rules,
) -> datetime | None:
    if calendar:
        return next((_moment(day) for day in calendar if day > moment.date()), None)
    if source.given_end is not None:
        return _known_end(source.given_end, rules)
    return following.moment if following else None


def spells_from_activity(
    relation: Iterable[Row],
    subject: str,
    happened: str,
    lapse_after: int,
    ends_at: str = "silence",
    as_of: Any = None,
    observe_from: Any = None,
    recorded_at: str | None = None,
    unit: str = "day",
    carry: Sequence[str] = (),
    source_rows: bool = False,
) -> tuple[Table, Table]:
    """Rebuild spells from bare activity, ended by silence; returns (sound, faulty)."""
    rules = _rules(as_of, observe_from, recorded_at, unit, carry, source_rows, False)
    _check_length("lapse_after", lapse_after, 1)
    _check_choice("ends_at", ends_at, ("silence", "last_activity"))
    ledger = _Ledger(rules)
    valid = []
    for row in relation:
        source = _Source(row, row[subject], row[happened])
        if ledger.passes(
            source,
            _record_fault(row, rules),
            "no_subject" if row[subject] is None else None,
            _time_fault(row[happened], rules.as_of, "no_time", "unreadable_time", "after_as_of"),
        ):
            valid.append(source)
    lapse = rules.span(lapse_after)
    spells: list[_Piece] = []
    for own in _by_subject(valid):
        last: datetime | None = None
        for source in sorted(own, key=lambda source: _moment(source.given_start)):
            moment = _moment(source.given_start)
            if last is None or rules.gap(last, moment) >= lapse:
                spells.append(_Piece(source.subject, moment, None, None, []))
            spells[-1].end = rules.counted_from(moment) + lapse if ends_at == "silence" else moment
            spells[-1].sources.append(source)
            last = moment
    _finish(spells, rules.as_of if ends_at == "silence" else rules.as_of - lapse, ledger)
    return ledger.sound, ledger.faulty


def spells_to_first_event(
    origins: Iterable[Row],
    events: Iterable[Row],
    subject: str,
    origin_at: str,
    event_at: str,
    cause: str | None = None,
    event_subject: str | None = None,
    as_of: Any = None,
    observe_from: Any = None,
    recorded_at: str | None = None,
    unit: str = "day",
    carry: Sequence[str] = (),
    source_rows: bool = False,
) -> tuple[Table, Table]:
    """Rebuild the time from each origin to the first event at or after it; returns (sound, faulty)."""
    rules = _rules(as_of, observe_from, recorded_at, unit, carry, source_rows, cause is not None)
    ledger = _Ledger(rules)
    spells: list[_Piece] = []
    for row in origins:
        source = _Source(row, row[subject], row[origin_at])
        if ledger.passes(
            source,
            _record_fault(row, rules),
            "no_subject" if row[subject] is None else None,
            _time_fault(row[origin_at], rules.as_of, "no_start", "unreadable_start", "starts_after_as_of"),
        ):
            start = _moment(row[origin_at])
            repeats = any((s.subject, s.start) == (source.subject, start) for s in spells)
            if ledger.passes(source, "duplicate_row" if repeats else None):
                spells.append(_Piece(source.subject, start, None, None, [source]))
    for source in _sound_events(events, event_subject or subject, event_at, cause, ledger):
        _count_event(source, [spell for spell in spells if spell.subject == source.subject], ledger)
    _finish(spells, rules.as_of, ledger)
    return ledger.sound, ledger.faulty


def _sound_events(
    events: Iterable[Row], subject: str, event_at: str, cause: str | None, ledger: _Ledger
) -> list[_Source]:
    sound = []
    for row in events:
        why = row[cause] if cause else None
        source = _Source(row, row[subject], row[event_at], None, why, carries=False)
        if ledger.passes(
            source,
            _record_fault(row, ledger.rules),
            "no_subject" if row[subject] is None else None,
            _time_fault(row[event_at], ledger.rules.as_of, "no_time", "unreadable_time", "after_as_of"),
        ):
            sound.append(source)
    return sound


def _count_event(source: _Source, spells: Sequence[_Piece], ledger: _Ledger) -> None:
    """End every spell of the subject that has no earlier event; count the row to the latest origin."""
    moment, why = _moment(source.given_start), _as_text(source.given_kind)
    earlier = [spell for spell in spells if spell.start <= moment]
    if not earlier:
        ledger.refuse(source, "no_origin")
        return
    max(earlier, key=lambda spell: spell.start).sources.append(source)
    for spell in earlier:
        if spell.end is None or moment < spell.end:
            spell.end, spell.cause = moment, why
        elif moment == spell.end and why is not None:
            spell.cause = why if spell.cause is None else min(spell.cause, why)


def spells_from_durations(
    relation: Iterable[Row],
    duration: str,
    event: str,
    subject: str | None = None,
    entry: str | None = None,
    cause: str | None = None,
    weight: str | None = None,
    carry: Sequence[str] = (),
    unit: str = "day",
    source_rows: bool = False,
) -> tuple[Table, Table]:
    """Rebuild spells from rows that have a duration already; returns (sound, faulty)."""
    rules = _rules(None, None, None, unit, carry, source_rows, cause is not None)
    ledger = _Ledger(rules)
    spells = []
    for row in relation:
        entered, weighs = row[entry] if entry else None, row[weight] if weight else 1
        source = _Source(row, row[subject] if subject else None, entered, row[duration], row[event])
        if ledger.passes(
            source,
            "no_subject" if subject and row[subject] is None else None,
            _length_fault(row[duration], "duration", "no_duration"),
            "no_event" if row[event] is None else None,
            None if _readable(read_event, row[event]) else "unreadable_event",
            _length_fault(entered, "entry", None),
            _order_fault(entered, row[duration]),
            _weight_fault(weighs),
        ):
            spells.append(_given_spell(source, row[cause] if cause else None, weighs, weight, rules))
    for own in _by_subject_id(spells):
        for number, spell in enumerate(sorted(own, key=lambda spell: (spell["entry"], spell["duration"])), 1):
            spell["spell_number"] = number if subject else 1
            ledger.sound.append(spell)
    return ledger.sound, ledger.faulty


def _length_fault(value: Any, name: str, none: str | None) -> str | None:
    if value is None:
        return none
    if not _readable(read_number, value):
        return f"unreadable_{name}"
    number = read_number(value)
    assert number is not None
    if number < 0:
        return f"negative_{name}"
    return f"{name}_not_whole" if number != int(number) else None


def _order_fault(entered: Any, duration: Any) -> str | None:
    if not (_readable(read_number, entered) and _readable(read_number, duration)):
        return None
    first, last = read_number(entered) or Decimal(0), read_number(duration)
    return "entry_after_duration" if last is not None and first > last else None


def _weight_fault(value: Any) -> str | None:
    if value is None:
        return "no_weight"
    if not _readable(read_number, value):
        return "unreadable_weight"
    return None if (read_number(value) or 0) > 0 else "weight_not_positive"


def _given_spell(
    source: _Source, cause: Any, weighs: Any, weight: str | None, rules: _Rules
) -> dict[str, Any]:
    happened = read_event(source.given_kind)
    values = (
        source.subject,
        1,
        None,
        None,
        int(read_number(source.given_start) or 0),
        int(read_number(source.given_end) or 0),
        happened,
        rules.cause(_as_text(cause)) if happened else None,
        float(read_number(weighs) or 0) if weight else 1,
    )
    spell = dict(zip(SPELL_COLUMNS, values, strict=True))
    if rules.source_rows:
        spell["source_rows"] = 1
    for column in rules.carry:
        spell[column] = source.row[column]
    return spell


def _by_subject_id(spells: Iterable[dict[str, Any]]) -> list[Table]:
    subjects: dict[Any, Table] = {}
    for spell in spells:
        subjects.setdefault(spell["subject_id"], []).append(spell)
    return list(subjects.values())
