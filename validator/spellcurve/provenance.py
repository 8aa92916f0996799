"""Read the one-line comment with which the package's compiled SQL says what it computes.

The comment may stand anywhere in a statement: a user may call a macro inside a CTE of their own.
"""

from __future__ import annotations

import json
import re
from dataclasses import dataclass, field
from typing import Any

_COMMENT = re.compile(r"/\* spellcurve (?P<json>.*?) ?\*/", re.DOTALL)
_START = "/* spellcurve {"


class ProvenanceError(ValueError):
    """A comment which calls itself Spellcurve's, but cannot be read."""


@dataclass(frozen=True)
class Provenance:
    """What one macro computed.

    Attributes:
        macro: name of the public macro.
        version: version of the package that wrote the SQL.
        spells: the relation read, quoted as in the SQL; None where the macro reads no spell table.
        by: grouping columns.
        options: everything else in the comment, under its own names.
    """

    macro: str
    version: str
    spells: str | None = None
    by: tuple[str, ...] = ()
    options: dict[str, Any] = field(default_factory=dict)


def find_provenance(sql: str, where: str = "the SQL") -> list[Provenance]:
    """Find every provenance comment in a statement, in order; none gives an empty list.

    Args:
        sql: compiled SQL.
        where: what to call the SQL in an error, for instance the name of the model.

    Raises:
        ProvenanceError: a comment is not a JSON object with a macro and a version.
    """
    found = []
    end = 0
    while (start := sql.find(_START, end)) >= 0:
        match = _COMMENT.match(sql, start)
        if match is None:
            raise ProvenanceError(_unreadable(where, sql, start, "it is not closed"))
        found.append(_read(match["json"], where, sql, start))
        end = match.end()
    return found


def first_provenance(sql: str, macro: str | None = None, where: str = "the SQL") -> Provenance | None:
    """Find the first provenance comment (of one macro, if named), or None; errors as ``find_provenance``."""
    every = find_provenance(sql, where)
    return next((one for one in every if macro is None or one.macro == macro), None)


def _read(text: str, where: str, sql: str, start: int) -> Provenance:
    try:
        content = json.loads(text)
    except json.JSONDecodeError as error:
        raise ProvenanceError(_unreadable(where, sql, start, f"it is not JSON ({error.msg})")) from None
    content = dict(content)
    macro, version = content.pop("macro", None), content.pop("version", None)
    spells, by = content.pop("spells", None), content.pop("by", None) or []
    if not isinstance(macro, str) or not isinstance(version, str):
        raise ProvenanceError(_unreadable(where, sql, start, "it does not name a macro and a version"))
    if not (spells is None or isinstance(spells, str)):
        raise ProvenanceError(_unreadable(where, sql, start, "its spells is not the name of a relation"))
    if not isinstance(by, list) or not all(isinstance(name, str) for name in by):
        raise ProvenanceError(_unreadable(where, sql, start, "its by is not a list of columns"))
    return Provenance(macro, version, spells, tuple(by), content)


def _unreadable(where: str, sql: str, start: int, why: str) -> str:
    line = sql.count("\n", 0, start) + 1
    return (
        f"The Spellcurve comment on line {line} of {where} cannot be read: {why}; compile the model "
        "again with an unchanged package of the validator's version."
    )
