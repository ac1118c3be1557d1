"""The report of a gate as SARIF: a result for each finding that does not hold, at the kernel's lines.

"Static Analysis Results Interchange Format (SARIF) Version 2.1.0", OASIS Standard, 2020; sections from memory. A claim
that fails is of kind "fail" and level "error"; a note of kind "fail" and level "note". What is undecided is "open"
(3.27.9: too little is known to decide), which goes with the level "none" alone; since a reader may pass over that, the
run says besides that it was not successful, and why (3.20). A figure has no line: it stands at the kernel's function.
"""

from __future__ import annotations

import hashlib
from collections import Counter
from collections.abc import Iterator, Sequence
from typing import Any, Final
from urllib.parse import quote

from narrowgauge.record.canonical import canonical_text
from narrowgauge.record.gate import CHECKS, Finding, GateEntry, GateReport, Place, State
from narrowgauge.record.printable import clean

__all__ = ["sarif_text"]

_SCHEMA: Final = "https://docs.oasis-open.org/sarif/sarif/v2.1.0/errata01/os/schemas/sarif-schema-2.1.0.json"
_ROOT: Final = "%SRCROOT%"  # what paths are relative to: the root of the repository, wherever it is checked out
_FINGERPRINT: Final = "narrowgaugeClaim/v1"
_KINDS: Final[dict[State, tuple[str, str]]] = {
    "fails": ("fail", "error"),
    "undecided": ("open", "none"),
    "note": ("fail", "note"),
}
# 3.11.5 and 3.11.6: what would begin a placeholder or a link.
_ESCAPES: Final = str.maketrans({"{": "{{", "}": "}}", "[": r"\[", "]": r"\]", "\\": "\\\\"})


def sarif_text(report: GateReport) -> str:
    """Return a report as SARIF 2.1.0, in canonical JSON: one run, whose rules are the checks of a gate."""
    name, _, version = report.written_by.partition(" ")
    rules = [
        {
            "id": _rule(check),
            "shortDescription": {"text": f"Whether {asks}."},
            "defaultConfiguration": {"level": "error"},
        }
        for check, asks in CHECKS.items()
    ]
    run = {
        "tool": {"driver": {"name": name, "version": version or "unknown", "rules": rules}},
        "invocations": [_invocation(report)],
        "originalUriBaseIds": {_ROOT: {"description": {"text": "the root of the repository"}}},
        "results": [result for entry in report.gates for result in _results(entry)],
    }
    return canonical_text({"$schema": _SCHEMA, "version": "2.1.0", "runs": [run]})


def _invocation(report: GateReport) -> dict[str, Any]:
    waiting = [entry.audit for entry in report.gates if entry.verdict == "inconclusive"]
    said = [
        {"level": "warning", "message": _text(f"{audit}: the gate is inconclusive, which is no pass")}
        for audit in waiting
    ]
    return {
        "executionSuccessful": not waiting,
        "exitCode": report.exit_code,
        **({"toolExecutionNotifications": said} if said else {}),
    }


def _results(entry: GateEntry) -> Iterator[dict[str, Any]]:
    places = list(CHECKS)
    seen: Counter[tuple[object, ...]] = Counter()
    for one in entry.findings:
        if one.state not in _KINDS:
            continue
        kind, level = _KINDS[one.state]
        claim = (entry.audit, entry.kernel, one.check, one.level, one.quantity, one.arm)
        known = {"audit": entry.audit, "kernel": entry.kernel, "level": one.level}
        known |= {"quantity": one.quantity, "arm": one.arm, "pathsNeeded": one.paths_needed}
        yield {
            "ruleId": _rule(one.check),
            "ruleIndex": places.index(one.check),
            "kind": kind,
            "level": level,
            "message": _text(_message(one)),
            "locations": [_location(one.place or entry.place)],
            # Neither lines nor figures, which move while the claim stays the same.
            "partialFingerprints": {_FINGERPRINT: _digest((*claim, seen[claim]))},
            "properties": {
                name: clean(value) if isinstance(value, str) else value
                for name, value in known.items()
                if value is not None
            },
        }
        seen[claim] += 1


def _message(finding: Finding) -> str:
    opening = {"undecided": "Undecided, which is no pass: ", "note": "Note: "}.get(finding.state, "")
    return f"{opening}{finding.message}"


def _location(place: Place) -> dict[str, Any]:
    # As bytes: a name need not be UTF-8. With its colon quoted no first part is taken for a scheme.
    uri = quote(place.file.encode("utf-8", "surrogateescape"), safe="/")
    return {
        "physicalLocation": {
            "artifactLocation": {"uri": uri, "uriBaseId": _ROOT},
            "region": {"startLine": max(1, place.line)},
        }
    }


def _text(text: str) -> dict[str, str]:
    return {"text": clean(text).translate(_ESCAPES)}


def _rule(check: str) -> str:
    return check.replace(" ", "-")


def _digest(parts: Sequence[object]) -> str:
    return hashlib.sha256(repr(parts).encode("utf-8", "backslashreplace")).hexdigest()
