"""What a person reads of a gate: a table for each audit file, and every finding that does not hold; plain text.

Judging a finished audit has to be quick, so that nothing is imported that draws tables.
"""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterator, Sequence

from narrowgauge.record.gate import CHECKS, Finding, GateEntry, GateReport, State, Verdict
from narrowgauge.record.policy import MachinePart
from narrowgauge.report.wording import clean, shown_edge

__all__ = ["gate_lines"]

_SAYS: dict[Verdict, str] = {
    "pass": "the gate passes",
    "fail": "the gate FAILS",
    "inconclusive": "the gate is INCONCLUSIVE: it does not pass",
}
_OPEN: tuple[State, ...] = ("fails", "undecided", "note")
_WORDS: dict[State, tuple[str, str]] = {
    "fails": ("fails", "fail"),
    "undecided": ("undecided", "undecided"),
    "note": ("note", "notes"),
    "holds": ("holds", "hold"),
}
_LEAST = 40  # columns: a narrower terminal folds lines itself


def gate_lines(report: GateReport, width: int = 100) -> str:
    """Return the text of a report, each line ended and none wider than `width` columns where that is 40 or more."""
    parts = ["\n".join(_entry(entry, max(width, _LEAST))) for entry in report.gates]
    return "\n\n".join(parts) + "\n"


def _entry(entry: GateEntry, width: int) -> Iterator[str]:
    for text in _head(entry):
        yield from _folded(text, width)
    if entry.findings:
        yield ""
        yield from _table(entry.findings, width)
    shown = [one for state in _OPEN for one in entry.findings if one.state == state]
    if shown:
        yield ""
    for one in shown:
        again = ", measured twice" if one.stages > 1 and one.state == "fails" else ""
        place = f" ({one.place.file}:{one.place.line})" if one.place is not None else ""
        yield from _folded(f"{one.state}: {one.check}{again}: {one.message}{place}", width)
    asked = list(dict.fromkeys(one.check for one in shown))
    if asked:
        yield ""
    for check in asked:
        yield from _folded(f"{check} asks whether {CHECKS[check]}", width)
    if entry.verdict == "inconclusive" and any(_waits(one) for one in shown):
        yield ""
        by = (
            f"a larger most_paths under [gate] in {entry.audit}"
            if entry.seed is not None
            else "the gate without --measured"
        )
        yield from _folded(f"to decide what is open: {by}", width)
    if entry.verdict == "fail" or any(one.state == "note" for one in shown):
        yield ""
        yield from _folded(f"to renew the policy, where the change is meant: {entry.renew}", width)


def _waits(one: Finding) -> bool:
    """Return whether more paths may decide a finding: a figure that does not exist is none however many there are."""
    figure = one.limit is not None and (one.estimate is not None or one.paths_needed is not None)
    return one.state == "undecided" and figure


def _head(entry: GateEntry) -> Iterator[str]:
    yield f"{entry.audit}: {_SAYS[entry.verdict]}"
    yield f"policy {entry.policy}, kernel {entry.kernel} ({entry.place.file}:{entry.place.line})"
    if any(entry.paths):
        drawn = " to ".join(f"{number:,}" for number in sorted({min(entry.paths), max(entry.paths)}))
        yield f"{drawn} paths a level, " + ("a finished audit" if entry.seed is None else f"seed {entry.seed}")
    if entry.policy_machine is None:
        return
    made = _machine(entry.policy_machine)
    if entry.same_machine is False and entry.machine is not None:
        yield f"another class of machine: the policy is of {made}, this was measured on {_machine(entry.machine)}"
    else:
        yield f"the policy is of {'this class of machine, ' if entry.same_machine else ''}{made}"


def _table(findings: Sequence[Finding], width: int) -> Iterator[str]:
    """Yield a row for each check that was made: how many findings are in which state, and the nearest to its limit."""
    rows = [("check", "found", "nearest to its limit")]
    for check in CHECKS:
        found = [one for one in findings if one.check == check]
        if found:
            rows.append((check, _counts(found), _nearest(found)))
    first, second = (max(len(row[column]) for row in rows) for column in (0, 1))
    for name, counted, nearest in rows:
        start = f"{name:<{first}}  {counted:<{second}}  "
        if len(start) + _LEAST // 2 <= width:
            lines = _folded(nearest, width - len(start), "")
            yield f"{start}{next(lines, '')}".rstrip()
            yield from (f"{' ' * len(start)}{line}" for line in lines)
        else:
            yield from _folded(": ".join(part for part in (name, counted, nearest) if part), width)


def _counts(found: Sequence[Finding]) -> str:
    counted = {state: sum(one.state == state for one in found) for state in _WORDS}
    return ", ".join(f"{number} {_WORDS[state][number > 1]}" for state, number in counted.items() if number)


def _nearest(found: Sequence[Finding]) -> str:
    """Return the claim whose bound is nearest to its limit or farthest beyond it; facts have none."""
    measured = [(used, one) for one in found if (used := _used(one)) is not None]
    if not measured:
        return ""
    _, one = max(measured, key=lambda pair: pair[0])
    edges = [one.limit] if one.limit is not None else []
    estimate, low, high = (shown_edge(value, edges) for value in (one.estimate, one.low, one.high))
    side = "at least" if _at_least(one) else "at most"
    where = ", ".join(str(part) for part in (_level(one), one.quantity, one.arm) if part is not None)
    return clean(f"{estimate} ({low} to {high}), {side} {one.limit:.4g}: {where}")


def _used(one: Finding) -> float | None:
    """Return how much of its limit a claim uses up, 1 at the limit; None where that is not a number."""
    if one.limit is None or one.limit <= 0 or one.low is None or one.high is None:
        return None
    if _at_least(one):
        return one.limit / one.low if one.low > 0 else math.inf
    return one.high / one.limit


def _at_least(one: Finding) -> bool:
    return one.compared is not None and one.compared.endswith("at least the limit")


def _level(one: Finding) -> str:
    return "all levels" if one.level is None else f"level {one.level}"


def _folded(text: str, width: int, indent: str = "  ") -> Iterator[str]:
    if text:
        yield from textwrap.wrap(clean(text), width, subsequent_indent=indent, break_on_hyphens=False)


def _machine(machine: MachinePart) -> str:
    features = ", ".join(machine.vector_features) or "no vector features"
    return f"{machine.system} {machine.machine} ({features})"
