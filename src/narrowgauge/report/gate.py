"""What a person reads of a gate: one table for each audit file, and every finding that does not hold; plain text."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from narrowgauge.record.gate import CHECKS, Finding, GateEntry, GateReport, Verdict
from narrowgauge.record.policy import MachinePart
from narrowgauge.report.wording import clean

__all__ = ["gate_lines"]

_SAYS: dict[Verdict, str] = {
    "pass": "the gate passes",
    "fail": "the gate FAILS",
    "inconclusive": "the gate is INCONCLUSIVE: it does not pass",
}
_STATES = ("fails", "undecided", "note", "holds")
_OPEN = _STATES[:3]


def gate_lines(report: GateReport) -> str:
    """Return the text of a report, each line ended."""
    parts = ["\n".join(_entry(entry)) for entry in report.gates]
    return "\n\n".join(parts) + "\n"


def _entry(entry: GateEntry) -> Iterator[str]:
    yield clean(f"{entry.audit}: {_SAYS[entry.verdict]}")
    yield clean(f"policy {entry.policy}, kernel {entry.kernel} ({entry.place.file}:{entry.place.line})")
    if any(entry.paths):
        drawn = " to ".join(f"{number:,}" for number in sorted({min(entry.paths), max(entry.paths)}))
        seed = "a finished audit" if entry.seed is None else f"seed {entry.seed}"
        yield f"{drawn} paths a level, {seed}"
    if entry.same_machine is False and entry.machine is not None and entry.policy_machine is not None:
        yield clean(
            f"another class of machine: the policy is of {_machine(entry.policy_machine)}, "
            f"this was measured on {_machine(entry.machine)}"
        )
    yield ""
    yield from _table(entry.findings)
    shown = [one for state in _OPEN for one in entry.findings if one.state == state]
    if shown:
        yield ""
    for one in shown:
        again = ", measured twice" if one.stages > 1 and one.state == "fails" else ""
        yield clean(f"{one.state}: {one.check}{again}: {one.message}")
    if entry.verdict == "fail" or any(one.state == "note" for one in shown):
        yield ""
        yield clean(f"to renew the policy, where the change is meant: {entry.renew}")


def _table(findings: Sequence[Finding]) -> Iterator[str]:
    """Yield one line for each check that was made: what it asks, and how many of its findings are in which state."""
    counts = {check: [sum(f.check == check and f.state == s for f in findings) for s in _STATES] for check in CHECKS}
    made = {check: row for check, row in counts.items() if any(row)}
    if not made:
        return
    width = max(len(check) for check in made)
    yield f"{'check':<{width}}  fails  undecided  notes  holds  asks whether"
    for check, (fails, undecided, notes, holds) in made.items():
        yield f"{check:<{width}}  {fails:>5}  {undecided:>9}  {notes:>5}  {holds:>5}  {CHECKS[check]}"


def _machine(machine: MachinePart) -> str:
    features = ", ".join(machine.vector_features) or "no vector features"
    return f"{machine.system} {machine.machine} ({features})"
