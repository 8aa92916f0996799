"""Compare the spells, or the refused rows, that a builder gave with those that it should have given."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from datetime import date, datetime
from typing import Any

from spellcurve.compare import Comparison, Disagreement

Rows = Sequence[Mapping[str, Any]]


def local(value: Any) -> Any:
    """A moment as its clock shows it: the warehouse reads it so too when it drops the zone."""
    return value.replace(tzinfo=None) if isinstance(value, datetime) else value


def as_moment(value: Any) -> Any:
    """A date as the moment at which it begins; anything else as ``local`` has it."""
    if isinstance(value, date) and not isinstance(value, datetime):
        return datetime(value.year, value.month, value.day)
    return local(value)


#: What tells one row from another in a sentence.
_TELLING = ("subject_id", "spell_number", "given_start", "fault", "entry", "duration")
#: Not compared: a sentence, which may change; and raw values as text, which each warehouse writes its way.
_UNCOMPARED = ("detail", "given_start", "given_end", "given_kind")


def compare_rows(given: Rows, expected: Iterable[Mapping[str, Any]], kind: str) -> Comparison:
    """Compare spells, or refused rows, as they are; the order of rows means nothing.

    Args:
        given: rows as the warehouse returned them, names in lower case.
        expected: rows as they should be.
        kind: what to call a row.
    """
    found = Comparison(rows=len(given))
    wanted = [{name.strip('"`[]').lower(): value for name, value in row.items()} for row in expected]
    names = [name for name in (wanted[0] if wanted else {}) if name not in _UNCOMPARED]
    if given:
        for name in [name for name in names if name not in given[0]]:
            sentence = f"The table has no column {name}."
            found.disagreements.append(Disagreement("missing column", None, None, name, None, None, sentence))
            names.remove(name)
    key = [name for name in ("subject_id", "spell_number") if name in names]
    found.figures = len(wanted) * len(names)
    left = Counter(_as_compared(row, names) for row in given)
    missing = []
    for row in wanted:
        if left[_as_compared(row, names)] > 0:
            left[_as_compared(row, names)] -= 1
        else:
            missing.append(row)
    extra: list[Mapping[str, Any]] = []
    for published in given:
        if left[_as_compared(published, names)] > 0:
            left[_as_compared(published, names)] -= 1
            extra.append(published)
    for row in missing:
        twin: Mapping[str, Any] | None = next(
            (one for one in extra if _as_compared(one, key) == _as_compared(row, key))
            if len(key) == 2
            else iter(()),
            None,
        )
        if twin is None:
            sentence = f"The {kind} with {_told(row)} is missing from the table."
            found.disagreements.append(Disagreement("missing row", None, None, None, None, None, sentence))
            continue
        extra.remove(twin)
        for name in names:
            if _as_compared(row, [name]) != _as_compared(twin, [name]):
                sentence = (
                    f"{name} of the {kind} with {_told(row)} is {_shown(twin[name])}, but "
                    f"{_shown(row[name])} is expected."
                )
                wrong = "wrong null" if row[name] is None or twin[name] is None else "wrong number"
                place = tuple(row.get(part) for part in key)
                found.disagreements.append(
                    Disagreement(wrong, place, None, name, row[name], twin[name], sentence)
                )
    for left_over in extra:
        sentence = f"The {kind} with {_told(left_over)} should not be in the table."
        found.disagreements.append(Disagreement("extra row", None, None, None, None, None, sentence))
    return found


def _as_compared(row: Mapping[str, Any], names: Iterable[str]) -> tuple[Any, ...]:
    values = (as_moment(row.get(name)) for name in names)
    return tuple((type(value) is bool, value) for value in values)


def _told(row: Mapping[str, Any]) -> str:
    return ", ".join(f"{name} {_shown(row[name])}" for name in _TELLING if row.get(name) is not None)


def _shown(value: Any) -> str:
    return "null" if value is None else str(value)
