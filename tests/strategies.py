"""Random spells and raw rows for the property tests."""

from __future__ import annotations

from hypothesis import strategies as st

GROUPS = [None, "household", "individual", 'O\'Hara "x" é', ""]


@st.composite
def spell_rows(draw, fractional: bool = False, largest: int = 12, most: int = 40):
    """Rows of a spell table: ties, zero durations, late entry (also equal to the duration), weights,
    null groups.
    """
    late, tied = draw(st.booleans()), draw(st.booleans())
    events = draw(st.sampled_from([[0, 1], [0], [1]]))
    top = 3 if tied else largest
    rows = []
    for _ in range(draw(st.integers(0, most))):
        duration = draw(st.integers(0, top))
        entry = draw(st.integers(0, duration)) if late and draw(st.booleans()) else 0
        weight = (
            draw(st.sampled_from([1, 1, 2, 7, 1000])) if not fractional else draw(st.integers(1, 800)) / 64
        )
        rows.append(
            {
                "plan": draw(st.sampled_from(GROUPS)),
                "entry": entry,
                "duration": duration,
                "event": draw(st.sampled_from(events)),
                "weight": weight,
            }
        )
    return rows


# 'today' is 2024-03-31 in these rows: some lie after it, some cannot be read, some are missing.
AS_OF = "2024-03-31"
DAYS = [
    "2023-12-30",
    "2024-01-30",
    "2024-01-31",
    "2024-02-28",
    "2024-02-29",
    "2024-03-01",
    "2024-03-30",
    AS_OF,
    "2024-04-02",
]
# No moment is spelt in two ways, so that it does not matter which copy of a row is the duplicate.
TIMES = ["", " 09:30", "T10:15:00", " 09:30:00.25", " 23:59:59"]
UNREADABLE = [
    "2024-02-30",
    "2023-02-29",
    "01/02/2024",
    "2024-01-01 24:00:00",
    "2024-01-01 09:30.5",
    "soon",
    "",
]
SUBJECTS = ["ann", "bob", "é'x\"", "", None]


@st.composite
def moments(draw, plain: bool, missing: bool = True):
    """Text of a date or a time; with `plain`, dates only and all of them readable."""
    kind = draw(st.integers(0, 19))
    if missing and kind == 0:
        return None
    if not plain and kind == 1:
        return draw(st.sampled_from(UNREADABLE))
    return draw(st.sampled_from(DAYS)) + ("" if plain else draw(st.sampled_from(TIMES)))


@st.composite
def raw_rows(draw, kinds: tuple[str | None, ...], most: int = 14):
    """Rows as a source keeps them: subject_key, began, ended, kind, written_on, nr, plan (a value of the
    row's own content).
    """
    plain = draw(st.booleans())
    subjects = draw(st.sampled_from([SUBJECTS[:1], SUBJECTS[:2], SUBJECTS]))
    rows = []
    for _ in range(draw(st.integers(0, most))):
        row = {
            "subject_key": draw(st.sampled_from(subjects)),
            "began": draw(moments(plain)),
            "ended": draw(moments(plain)),
            "kind": draw(st.sampled_from(kinds)),
            "written_on": draw(moments(plain)),
            "nr": draw(st.integers(1, 3)),
        }
        rows.append(row | {"plan": "of " + str(row["began"])[:10]})
    return rows
