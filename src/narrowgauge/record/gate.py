"""What a gate found: one finding for each claim of a policy, and the verdict on each audit file; no numpy.

Figures are finite; one that does not exist is None. Bounds are at the confidence of the claim, in the unit of the
estimate. Paths of files are relative to the repository, with forward slashes, so that two checkouts give the same
text.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Final, Literal

from msgspec import to_builtins

from narrowgauge.record.canonical import canonical_text
from narrowgauge.record.plan import Entry
from narrowgauge.record.policy import MachinePart

__all__ = [
    "CHECKS",
    "EXIT_CODES",
    "SCHEMA",
    "Check",
    "Finding",
    "GateEntry",
    "GateReport",
    "Place",
    "State",
    "Verdict",
    "gate_text",
    "report_of",
]

SCHEMA: Final = "narrowgauge-gate/1"

State = Literal["holds", "fails", "undecided", "note"]
Verdict = Literal["pass", "fail", "inconclusive"]
Check = Literal[
    "settings",
    "fingerprint",
    "run",
    "escapes",
    "branches",
    "finite",
    "levels",
    "error variance",
    "error mean",
    "bias",
    "gain",
    "edge",
    "rmse",
    "lost additions",
    "subnormals",
    "domain",
]

# What each check asks, for a reader who meets its name; the order is that of a table.
CHECKS: Final[dict[str, str]] = {
    "settings": "the audit file has the ladder, parameters, target, costs and formats of the policy",
    "fingerprint": "the kernel is the one that the policy was drawn up for",
    "run": "the kernel runs, and returns what it returned",
    "escapes": "no value leaves the emulation on a line where none did",
    "branches": "the two branches of each split agree to the bit",
    "finite": "no value in a format of the policy is infinite or not a number",
    "levels": "the coarse paths of a level have the mean of the fine paths one level below",
    "error variance": "the variance of the rounding error has not grown",
    "error mean": "the mean of the rounding error has not grown",
    "bias": "rounding shifts the mean of a level by no more than its share of the target",
    "gain": "a level still costs so many times less than it does today",
    "edge": "a level still costs so many times less than with the best that wider formats can do",
    "rmse": "a run with the planned paths still reaches the target",
    "lost additions": "the share of additions that change nothing has not grown",
    "subnormals": "the share of subnormal results has not grown",
    "domain": "the schemes of the policy hold where the box of parameters that it claims was tried",
}

# 1 before 3: what failed is to be put right, whatever else is open. Wrong usage, 2, leaves as an error.
EXIT_CODES: Final[dict[Verdict, int]] = {"fail": 1, "inconclusive": 3, "pass": 0}


class Place(Entry, frozen=True, kw_only=True):
    """Where something stands: a file, relative to the repository, and a line from 1 on."""

    file: str
    line: int


class Finding(Entry, frozen=True, kw_only=True):
    """One claim of the policy and whether it holds.

    `estimate`, `low` and `high` are the fresh figure with its bounds, `limit` what it may be; facts have none.
    `compared` says in words what the figure is and on which side of the limit it has to lie. `paths_needed` is the
    number of paths of the level (of every level where `level` is None) at which an undecided claim would be decided;
    None where that cannot be told. `stages` is the number of independent samples that were looked at. `place` is the
    line it concerns, where one is known.
    """

    check: Check
    level: int | None
    quantity: str | None
    arm: str | None
    state: State
    message: str
    compared: str | None = None
    estimate: float | None = None
    low: float | None = None
    high: float | None = None
    limit: float | None = None
    paths_needed: int | None = None
    stages: int = 1
    place: Place | None = None


class GateEntry(Entry, frozen=True, kw_only=True):
    """The verdict on one audit file.

    `place` is the kernel's function (line 1 of the audit file where it has no Python source). `paths` are those
    of each level that were drawn here, over all stages; `seed` is None where a finished audit was judged. `machine` is
    None where nothing was measured; `same_machine` is whether it is of the policy's class.
    """

    audit: str
    policy: str
    kernel: str
    place: Place
    verdict: Verdict
    findings: list[Finding]
    seed: int | None
    paths: list[int]
    policy_machine: MachinePart | None
    machine: MachinePart | None
    same_machine: bool | None
    renew: str


class GateReport(Entry, frozen=True, kw_only=True):
    """All audit files of one gate; `verdict` and `exit_code` are the worst of theirs."""

    schema: Literal["narrowgauge-gate/1"]
    written_by: str
    verdict: Verdict
    exit_code: int
    gates: list[GateEntry]


def report_of(gates: Sequence[GateEntry], written_by: str) -> GateReport:
    """Return the report on some audit files; fail is worse than inconclusive, and that worse than pass."""
    verdicts = {one.verdict for one in gates}
    worst: Verdict = "fail" if "fail" in verdicts else "inconclusive" if "inconclusive" in verdicts else "pass"
    return GateReport(
        schema=SCHEMA, written_by=written_by, verdict=worst, exit_code=EXIT_CODES[worst], gates=list(gates)
    )


def gate_text(report: GateReport) -> str:
    """Return a report as canonical text; raises ValueError or TypeError where a figure is not finite or not plain.

    What UTF-8 cannot hold, in what a kernel raised or in a file's name, is written as an escape.
    """
    return canonical_text(_encodable(to_builtins(report)))


def _encodable(value: Any) -> Any:
    if isinstance(value, str):
        return value.encode("utf-8", "backslashreplace").decode("utf-8")
    if isinstance(value, dict):
        return {name: _encodable(element) for name, element in value.items()}
    return [_encodable(element) for element in value] if isinstance(value, list) else value
