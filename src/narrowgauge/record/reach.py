"""The parts of an audit's record that a trial run fills: what the emulation got hold of, and constants out of range."""

from __future__ import annotations

from typing import Literal

from narrowgauge.record.branches import BranchesEntry
from narrowgauge.record.canary import CanaryEntry
from narrowgauge.record.plan import Entry

__all__ = [
    "ConstantEntry",
    "ConstantValue",
    "DecisionEntry",
    "FaultEntry",
    "LineCount",
    "RangeEntry",
    "ReachEntry",
    "ReachLine",
    "TrialEntry",
]


class ReachLine(Entry, frozen=True, kw_only=True):
    """Operations of one kind on one line of the kernel, in the trial run."""

    file: str | None
    line: int | None
    operation: str
    route: str
    count: int


class LineCount(Entry, frozen=True, kw_only=True):
    """How often something happened on one line of the kernel."""

    file: str | None
    line: int | None
    count: int


class DecisionEntry(Entry, frozen=True, kw_only=True):
    """Decisions of one line that an arm did not take as the reference did on the same draws.

    Each side has the number of decisions and how many of them were true. An arm may decide otherwise path by path and
    come to the same two numbers; that does not show here.
    """

    file: str | None
    line: int | None
    arm: str
    reference_count: int
    reference_true: int
    count: int
    true: int


class ReachEntry(Entry, frozen=True, kw_only=True):
    """What the emulation got hold of in the trial run: `share` of the operations that round were rounded one by one.

    `integers` counts calls of int() on the state, which are among the decisions; `allowed_escapes` the values that left
    as plain ones on lines where the audit file allows it. Both hold the largest count of any run of the trial.
    """

    operations: int
    rounded: int
    share: float | None
    decisions: int
    lines: list[ReachLine]
    integers: list[LineCount]
    changed_decisions: list[DecisionEntry]
    allowed_escapes: list[LineCount]
    remarks: list[str]


class ConstantValue(Entry, frozen=True, kw_only=True):
    """One constant: what it became (None: infinite), by how many ulps of its own magnitude, and how often it was met.

    Some functions look at an argument twice, which counts twice.
    An ulp here is 2^(e - p + 1) for a constant c with 2^e <= |c| < 2^(e + 1) and p bits of precision, whether or not
    the format has that exponent.
    """

    value: float
    became: float | None
    ulps: float | None
    count: int


class ConstantEntry(Entry, frozen=True, kw_only=True):
    """Constants that become 0, infinite or subnormal, or move by more than half an ulp, on one line in one arm.

    `parameter` names an array of the audit file whose numbers meet the state before the kernel's first line. `values`
    holds the first ones of the `distinct` that were met.
    """

    file: str | None
    line: int | None
    parameter: str | None
    arm: str
    kind: Literal["zero", "infinite", "subnormal", "moved"]
    count: int
    distinct: int
    values: list[ConstantValue]


class RangeEntry(Entry, frozen=True, kw_only=True):
    """What the range of a format does to a kernel: its constants, met on the levels of the trial and the finest."""

    constants: list[ConstantEntry]


class FaultEntry(Entry, frozen=True, kw_only=True):
    """What stopped one arm of a trial run; the message begins with file and line where they are known.

    An `escape` (or a refusal) stops an audit; what the kernel `raised` in a narrow arm only keeps it from paying.
    """

    arm: str
    kind: Literal["escape", "raised"]
    message: str


class TrialEntry(Entry, frozen=True, kw_only=True):
    """A trial run: whether float64 through the whole machinery gave plain NumPy's bits, and what stopped any arm.

    `range` is None where float64 was stopped before it had met all constants. A kernel that rounds for itself has a
    `canary` and neither reach nor range; `identical` then says that two runs gave the same bits. `branches` is there
    where a trial is all that is run.
    """

    identical: bool
    reach: ReachEntry | None
    range: RangeEntry | None
    canary: list[CanaryEntry] | None = None
    faults: list[FaultEntry]
    branches: BranchesEntry | None = None
