"""What `spellcurve check` found, as JUnit XML and as JSON."""

from __future__ import annotations

import json
from typing import Any
from xml.etree import ElementTree as xml

from spellcurve.check import AGREES, UNCHECKED, CheckedCall, CheckResult

SHOWN = 50


def as_json(result: CheckResult) -> str:
    """The result as a JSON object: project, adapter, exit status, and an object for each call."""
    content: dict[str, Any] = {
        "adapter": result.adapter,
        "exit_status": result.exit_status,
        "calls": [
            {
                "model": call.model,
                "path": call.path,
                "macro": call.macro,
                "verdict": call.verdict,
                "rows": call.rows,
                "figures": call.figures,
                "largest_difference": call.largest_difference
                if call.largest_difference < float("inf")
                else None,
                "wrong": call.sentences,
                "note": call.note,
                "seconds": round(call.seconds, 3),
            }
            for call in result.calls
        ],
    }
    return json.dumps(content, indent=2, ensure_ascii=False) + "\n"


def as_junit(result: CheckResult) -> str:
    """The result as JUnit XML: a test case for a call, a failure if it disagrees, an error if not checked."""
    failed = sum(call.verdict not in (AGREES, UNCHECKED) for call in result.calls)
    unchecked = sum(call.verdict == UNCHECKED for call in result.calls)
    counts = {"tests": str(len(result.calls)), "failures": str(failed), "errors": str(unchecked)}
    seconds = f"{sum(call.seconds for call in result.calls):.3f}"
    suites = xml.Element("testsuites", counts)
    suite = xml.SubElement(
        suites, "testsuite", {"name": "spellcurve check", **counts, "skipped": "0", "time": seconds}
    )
    for call in result.calls:
        name = {"classname": call.path, "name": f"{call.model}: {call.macro}", "time": f"{call.seconds:.3f}"}
        case = xml.SubElement(suite, "testcase", name)
        if call.verdict == UNCHECKED:
            xml.SubElement(case, "error", {"message": _clean(call.note), "type": call.verdict})
        elif call.verdict != AGREES:
            said = xml.SubElement(case, "failure", {"message": _clean(headline(call)), "type": call.verdict})
            said.text = _clean("\n".join([*call.sentences[:SHOWN], *_more(call, SHOWN), call.note]).strip())
    xml.indent(suites)
    return xml.tostring(suites, encoding="unicode", xml_declaration=True) + "\n"


def headline(call: CheckedCall) -> str:
    """The verdict on one call in one sentence."""
    if call.verdict == UNCHECKED:
        return call.note
    size = f"{call.rows:,} rows, {call.figures:,} figures compared"
    if call.verdict == AGREES:
        return f"{size}, largest relative difference {call.largest_difference:.1e}"
    wrong = len(call.sentences)
    return f"{wrong:,} {'thing is' if wrong == 1 else 'things are'} wrong ({size}): {call.sentences[0]}"


def _more(call: CheckedCall, shown: int) -> list[str]:
    left = len(call.sentences) - shown
    return [f"… and {left:,} more."] if left > 0 else []


def _clean(text: str) -> str:
    """Text without the control characters that XML cannot hold."""
    return "".join(one if one in "\n\t" or ord(one) >= 32 else "\N{REPLACEMENT CHARACTER}" for one in text)
