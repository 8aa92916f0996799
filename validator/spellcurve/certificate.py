"""Writes what a qualification found as a dated certificate, in Markdown and in JSON."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from spellcurve.compare import TOLERANCE
from spellcurve.qualification import Figure, Qualification, QualifiedModel, Source

#: So many wrong rows of one table are told, and their number.
SHOWN = 20

_AGREEMENT = (
    "The macros of this version of the package, run by this adapter on this version of the engine, gave the "
    "published figures of these data sets to every printed digit, and the same rows as exact fractions to a "
    "relative difference of {tolerance:.0e}."
)
_DISAGREEMENT = (
    "Some of what the macros of this version of the package gave, run by this adapter on this version of the "
    "engine, is not what was published or not what exact fractions give. Do not rely on figures made by this "
    "combination until it is known why."
)
_LIMITS = (
    "This says nothing of other data, of how spells were made of your own tables, or of other versions: "
    "`spellcurve check` looks at your own figures, and a new version of engine, adapter or package needs a "
    "new certificate."
)


def meaning(found: Qualification) -> str:
    """What the certificate says, and what it does not."""
    said = _AGREEMENT.format(tolerance=TOLERANCE) if found.agrees else _DISAGREEMENT
    return f"{said} {_LIMITS}"


def write_certificate(found: Qualification, folder: str | Path) -> tuple[Path, Path]:
    """Write a certificate; one of the same adapter and day is replaced.

    Args:
        found: what ``spellcurve.qualify`` gave.
        folder: where to put the two files; made if it is not there.

    Returns:
        the Markdown and the JSON file, named spellcurve-<adapter>-<date> with .md and .json.

    Raises:
        OSError: the folder cannot be written to.
    """
    place = Path(folder).expanduser()
    place.mkdir(parents=True, exist_ok=True)
    name = f"spellcurve-{found.environment.adapter}-{found.moment:%Y-%m-%d}"
    markdown, data = place / f"{name}.md", place / f"{name}.json"
    markdown.write_text(as_markdown(found), encoding="utf-8")
    data.write_text(as_json(found), encoding="utf-8")
    return markdown, data


def verdict(found: Qualification) -> str:
    """The overall verdict in one sentence."""
    figures, models = len(found.figures), len(found.models)
    agreeing = sum(one.agrees for one in found.figures)
    same = sum(one.comparison.agrees for one in found.models)
    passed = found.tests_run - len(found.tests_failed)
    return (
        f"{'Agreement' if found.agrees else 'Disagreement'}: {agreeing:,} of {figures:,} printed figures, "
        f"{same:,} of {models:,} tables in exact fractions, {passed:,} of {found.tests_run:,} dbt tests."
    )


def as_json(found: Qualification) -> str:
    """The certificate as a JSON object; a figure that is not reached is null."""
    content: dict[str, Any] = {
        "certificate": "spellcurve qualify",
        "moment": found.moment.isoformat(),
        "verdict": "agreement" if found.agrees else "disagreement",
        "summary": verdict(found),
        "meaning": meaning(found),
        "environment": vars(found.environment),
        "dbt_tests": {"run": found.tests_run, "failed": list(found.tests_failed)},
        "sources": [vars(source) for source in found.sources],
        "figures": [
            {
                "data_set": one.data_set,
                "group": one.group,
                "figure": one.figure,
                "duration": one.duration,
                "printed": one.printed,
                "decimals": one.decimals,
                "computed": _finite(one.computed),
                "verdict": one.verdict,
                "source": one.source,
                "from_memory": one.from_memory,
            }
            for one in found.figures
        ],
        "exact_fractions": [
            {
                "model": one.model,
                "macro": one.macro,
                "rows": one.comparison.rows,
                "figures": one.comparison.figures,
                "largest_difference": _finite(one.comparison.largest_difference),
                "allowed_difference": TOLERANCE,
                "verdict": "agrees" if one.comparison.agrees else "disagrees",
                "wrong": [problem.sentence for problem in one.comparison.disagreements[:SHOWN]],
                "wrong_in_all": len(one.comparison.disagreements),
            }
            for one in found.models
        ],
    }
    return json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def as_markdown(found: Qualification) -> str:
    """The certificate as a page to read."""
    there = found.environment
    parts = [
        f"# Spellcurve on {there.adapter}: {'agreement' if found.agrees else 'DISAGREEMENT'}",
        verdict(found),
        _table(
            ("what", "version"),
            [
                ("date", f"{found.moment:%Y-%m-%d %H:%M} UTC"),
                ("engine", there.engine_version),
                ("adapter", f"dbt-{there.adapter} {there.adapter_version}"),
                ("dbt", there.dbt_version),
                ("package", f"spellcurve {there.package_version}"),
                ("validator", f"spellcurve {there.validator_version}"),
                ("profile and target", f"{there.profile}, {there.target}"),
            ],
        ),
        "## What this means",
        meaning(found),
    ]
    if found.wrong:
        parts += ["## What is wrong", _list(found.wrong, SHOWN)]
    memory = sum(one.from_memory for one in found.figures)
    passed = found.tests_run - len(found.tests_failed)
    parts += [
        "## Printed figures",
        f"{len(found.figures):,} figures, of which {memory:,} were written down from memory of the "
        "publication and not read in it (“memory” below). A figure agrees if it is the printed one after "
        "rounding to as many decimals.",
        *(part for source in found.sources for part in _of_source(source, found.figures)),
        "## Exact fractions",
        "Every row of every table, recomputed from the published observations with numbers of any length; "
        "only roots, logarithms and tails are rounded, at the end. Allowed is a relative difference of "
        f"{TOLERANCE:.0e}.",
        _exact_table(found.models),
        "## Tests of the package",
        f"{passed:,} of {found.tests_run:,} dbt tests of the reference data passed.",
    ]
    return "\n\n".join(parts) + "\n"


def _of_source(source: Source, figures: Iterable[Figure]) -> list[str]:
    own = [one for one in figures if one.data_set == source.data_set]
    memory = " The observations were written down from memory." if source.data_from_memory else ""
    parts = [f"### {source.data_set}", f"{source.citation} Shows: {source.shows}.{memory}"]
    if not own:
        return [*parts, "No figure was printed; see exact fractions below."]
    rows = [
        (
            "" if one.group is None else one.group,
            one.figure,
            "" if one.duration is None else str(one.duration),
            "not reached" if one.printed is None else one.printed,
            "" if one.computed is None and one.printed else _rounded(one.computed, one.decimals),
            one.verdict if one.agrees else f"**{one.verdict}**",
            "memory" if one.from_memory else "read",
            one.source,
        )
        for one in own
    ]
    return [
        *parts,
        _table(("group", "figure", "at", "printed", "computed", "verdict", "known from", "printed in"), rows),
    ]


def _rounded(value: float | None, decimals: int) -> str:
    """A computed figure with three more decimals than were printed."""
    if value is None:
        return "not reached"
    return str(int(value)) if value == int(value) and not decimals else f"{value:.{decimals + 3}f}"


def _exact_table(models: Iterable[QualifiedModel]) -> str:
    rows = [
        (
            one.model,
            one.macro,
            f"{one.comparison.rows:,}",
            f"{one.comparison.figures:,}",
            f"{one.comparison.largest_difference:.1e}",
            "agrees" if one.comparison.agrees else "**disagrees**",
        )
        for one in models
    ]
    return _table(("table", "macro", "rows", "figures", "largest difference", "verdict"), rows)


def _table(head: Iterable[str], rows: Iterable[Iterable[str]]) -> str:
    names = list(head)
    lines = [names, ["---"] * len(names), *(list(row) for row in rows)]
    return "\n".join("| " + " | ".join(cell.replace("|", "\\|") for cell in line) + " |" for line in lines)


def _list(sentences: list[str], shown: int) -> str:
    lines = [f"- {sentence}" for sentence in sentences[:shown]]
    left = len(sentences) - shown
    return "\n".join([*lines, *([f"- … and {left:,} more."] if left > 0 else [])])


def _finite(value: Any) -> Any:
    return None if isinstance(value, float) and not math.isfinite(value) else value
