"""Compare the rows of a published curve with the rows that should be there, figure by figure."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from decimal import Decimal
from fractions import Fraction
from typing import Any

from spellcurve.exact import BOUNDS, COUNTS, FIGURES, CurveRow

TOLERANCE = 1e-9
#: A bound close to 0 is a difference of two larger numbers, and double precision loses its leading digits.
#: Bounds that are this close to what is expected agree, whatever their ratio.
BOUND_ALLOWANCE = 1e-12

KINDS = ("missing column", "missing row", "extra row", "duplicate row", "wrong null", "wrong number")


@dataclass(frozen=True)
class Disagreement:
    """One thing that is wrong.

    Attributes:
        kind: one of ``KINDS``.
        group: values of the grouping columns; None where the whole table is meant.
        duration: of the row; None where no single row is meant.
        column: of the figure; None where a whole row is meant.
        expected, actual: the two figures, None for null or where there is none.
        sentence: all of it in words.
    """

    kind: str
    group: tuple[Any, ...] | None
    duration: Any
    column: str | None
    expected: Any
    actual: Any
    sentence: str

    def __str__(self) -> str:
        return self.sentence


@dataclass
class Comparison:
    """What a comparison found.

    Attributes:
        rows: published rows that were compared.
        figures: figures that were compared, nulls included.
        largest_difference: largest relative difference seen, 0 if there was none.
        largest_at: column, group and duration of that difference in words; None if there was none.
        disagreements: everything that is wrong, in the order of the expected rows.
    """

    rows: int = 0
    figures: int = 0
    largest_difference: float = 0.0
    largest_at: str | None = None
    disagreements: list[Disagreement] = field(default_factory=list)

    @property
    def agrees(self) -> bool:
        """Whether nothing is wrong."""
        return not self.disagreements

    def summary(self) -> str:
        """Say the result in one sentence."""
        seen = f"{_count(self.rows, 'row')}, {_count(self.figures, 'figure')} compared"
        largest = "no difference"
        if self.largest_at is not None:
            largest = f"largest relative difference {self.largest_difference:.1e} ({self.largest_at})"
        if self.agrees:
            return f"Agreement: {seen}, {largest}."
        return f"{_count(len(self.disagreements), 'disagreement')}: {seen}, {largest}."

    def report(self, limit: int = 10) -> str:
        """Say the result, and the first disagreements, one a line."""
        lines = [self.summary(), *(f"  {one}" for one in self.disagreements[:limit])]
        if len(self.disagreements) > limit:
            lines.append(f"  … and {len(self.disagreements) - limit:,} more.")
        return "\n".join(lines)

    def __str__(self) -> str:
        return self.report()


def compare_curves(
    actual: Iterable[Mapping[str, Any]],
    expected: Mapping[tuple[Any, ...], Sequence[CurveRow]],
    by: Sequence[str] = (),
    tolerance: float = TOLERANCE,
    columns: Sequence[str] = FIGURES,
) -> Comparison:
    """Compare a published survival curve with the expected one.

    Column names are matched without regard to case, since some warehouses return them in capitals. Whole
    counts must be equal; every other figure may differ by ``tolerance`` times the expected one (a bound also
    by ``BOUND_ALLOWANCE``), so that an expected 0 must be exactly 0. A NaN is never right: null is.

    Args:
        actual: rows as the warehouse returned them.
        expected: group values, in the order of ``by``, to the rows of that group.
        by: names of the grouping columns.
        tolerance: largest relative difference that still counts as agreement.
        columns: figures to compare.

    Raises:
        ValueError: the groups have more or fewer values than there are grouping columns.
    """
    for group in expected:
        if len(group) != len(by):
            raise ValueError(
                f"The expected group {group!r} has values for {_count(len(group), 'grouping column')}, "
                f"but by is {list(by)!r}; name as many columns."
            )
    found = Comparison()
    rows = [{name.lower(): value for name, value in row.items()} for row in actual]
    present = _present(rows, by, columns, found)
    if present is None:
        return found
    published = _by_place(rows, by, found)
    for group, expected_rows in expected.items():
        key = tuple(_plain(value) for value in group)
        for row in expected_rows:
            place = _Place(by, key, row.duration)
            match = published.pop((_key(key), row.duration), None)
            if match is None:
                found.disagreements.append(place.wrong("missing row", "is missing from the table"))
            else:
                _compare_row(match[1], row, place, present, tolerance, found)
    for place, _ in published.values():
        found.disagreements.append(place.wrong("extra row", "should not be in the table"))
    return found


@dataclass(frozen=True)
class _Place:
    """Where in the table a row belongs."""

    by: Sequence[str]
    group: tuple[Any, ...]
    duration: Any

    def __str__(self) -> str:
        names = [f"{name} = {_shown(value)}" for name, value in zip(self.by, self.group, strict=False)]
        return ", ".join([*names, f"duration {_shown(self.duration)}"])

    def wrong(self, kind: str, what: str) -> Disagreement:
        return Disagreement(kind, self.group, self.duration, None, None, None, f"The row at {self} {what}.")

    def wrong_figure(self, kind: str, column: str, expected: Any, actual: Any, what: str) -> Disagreement:
        sentence = f"{column} at {self} is {_shown(actual)}, {what}."
        return Disagreement(kind, self.group, self.duration, column, expected, actual, sentence)


def _present(
    rows: Sequence[Mapping[str, Any]], by: Sequence[str], columns: Sequence[str], found: Comparison
) -> list[str] | None:
    """Note missing columns and return the figures there are; None if the rows cannot even be told apart."""
    if not rows:
        return list(columns)
    missing = [name for name in (*by, "duration", *columns) if name.lower() not in rows[0]]
    for name in missing:
        sentence = f"The table has no column {name}."
        found.disagreements.append(Disagreement("missing column", None, None, name, None, None, sentence))
    if any(name in missing for name in (*by, "duration")):
        return None
    return [name for name in columns if name not in missing]


def _by_place(
    rows: Iterable[Mapping[str, Any]], by: Sequence[str], found: Comparison
) -> dict[tuple[Any, Any], tuple[_Place, Mapping[str, Any]]]:
    """Find each row by group and duration; a second row for the same place is a duplicate."""
    published: dict[tuple[Any, Any], tuple[_Place, Mapping[str, Any]]] = {}
    for row in rows:
        found.rows += 1
        place = _Place(by, tuple(_plain(row[name.lower()]) for name in by), _plain(row["duration"]))
        key = (_key(place.group), place.duration)
        if key in published:
            found.disagreements.append(place.wrong("duplicate row", "is in the table more than once"))
        else:
            published[key] = (place, row)
    return published


def _compare_row(
    actual: Mapping[str, Any],
    expected: CurveRow,
    place: _Place,
    columns: Sequence[str],
    tolerance: float,
    found: Comparison,
) -> None:
    for column in columns:
        found.figures += 1
        right, given = getattr(expected, column), _plain(actual[column.lower()])
        if right is None and given is None:
            continue
        if right is None or given is None:
            what = "but null is expected" if right is None else f"but {_shown(right)} is expected"
            found.disagreements.append(place.wrong_figure("wrong null", column, right, given, what))
        elif not _is_finite_number(given):
            what = f"which is no finite number; {_shown(right)} is expected"
            found.disagreements.append(place.wrong_figure("wrong number", column, right, given, what))
        else:
            _compare_numbers(given, right, column, place, tolerance, found)


def _compare_numbers(
    given: Any, right: Fraction | float, column: str, place: _Place, tolerance: float, found: Comparison
) -> None:
    exact, expected = Fraction(given), Fraction(right)
    gap = abs(exact - expected)
    if gap == 0 or (column in BOUNDS and gap <= BOUND_ALLOWANCE):
        return
    difference = float(gap / abs(expected)) if expected else math.inf
    if difference > found.largest_difference:
        found.largest_difference, found.largest_at = difference, f"{column} at {place}"
    both_whole = column in COUNTS and exact.denominator == 1 and expected.denominator == 1
    if both_whole or difference > tolerance:
        size = f"a relative difference of {difference:.1e}" if expected else "which is not 0"
        what = f"but {_shown(right)} is expected, {size}"
        found.disagreements.append(place.wrong_figure("wrong number", column, right, given, what))


def _plain(value: Any) -> Any:
    """Turn a numpy scalar into a Python one, and whole numbers of any type into int."""
    value = value.item() if hasattr(value, "item") else value
    if isinstance(value, Decimal | float) and _is_finite_number(value) and value == int(value):
        return int(value)
    return value


def _key(group: tuple[Any, ...]) -> tuple[Any, ...]:
    """Make group values comparable: true is not 1, and a NaN equals itself."""
    return tuple((type(v) is bool, "nan" if isinstance(v, float) and math.isnan(v) else v) for v in group)


def _is_finite_number(value: Any) -> bool:
    if isinstance(value, Decimal):
        return value.is_finite()
    if isinstance(value, float):
        return math.isfinite(value)
    return isinstance(value, int | Fraction) and not isinstance(value, bool)


def _shown(value: Any) -> str:
    if value is None:
        return "null"
    if isinstance(value, Fraction):
        return str(value.numerator) if value.denominator == 1 else repr(float(value))
    return value if isinstance(value, str) else (str(value) if isinstance(value, Decimal) else repr(value))


def _count(number: int, noun: str) -> str:
    return f"{number:,} {noun}" + ("" if number == 1 else "s")
