"""The part of an audit's record that says whether the two branches of a split cancel to the bit."""

from __future__ import annotations

from typing import Literal

from narrowgauge.record.plan import Entry

__all__ = ["BranchesEntry", "CastEntry", "MismatchEntry", "PointEntry", "TriedEntry", "WhereEntry"]

Condition = Literal["branches", "paths", "layout", "threads", "repeat", "influence"]


class TriedEntry(Entry, frozen=True, kw_only=True):
    """What was run in one format on one level.

    `paths` is the number of those on which the two branches were compared, 0 where the kernel is both; `varied` that of
    those on which the conditions were tried, `batches` the paths of a call, `orders` the memory layouts, of `varied`.
    """

    arm: str
    level: int
    paths: int
    varied: int
    batches: list[int]
    orders: list[str]
    threads: int
    repeats: int
    changed: int


class PointEntry(Entry, frozen=True, kw_only=True):
    """An operation of one branch: the line, and its values on an example path as text; they need not be finite."""

    kind: str
    file: str | None
    line: int | None
    operation: str
    text: str


class WhereEntry(Entry, frozen=True, kw_only=True):
    """The first operation of each branch, by value, whose operands the other has and whose result it has not."""

    low: PointEntry | None
    correction: PointEntry | None
    ulps: float | None
    incomplete: str | None


class MismatchEntry(Entry, frozen=True, kw_only=True):
    """Results that are not the same bits, of one quantity in one format on one level.

    `condition` says what was compared: the two branches; or one of them, `function`, with itself in another number of
    `paths` a call, another memory layout, in two threads at once, repeated, or with other paths changed; `detail` says
    in which. `differing` of `paths` differ, by `ulps_largest` and in the median `ulps_median` units in the last place
    of the format, None where that is not finite. `bias` is the mean of the mismatch in the unit of the quantity,
    `of_rmse` that over the target. `explanation` is what explains all `explained` paths that were asked. `numpys_own`:
    NumPy itself gives other bits for the same operation on the same values. `splits`: whether a split may be used in
    spite of it.
    """

    arm: str
    level: int
    quantity: str
    condition: Condition
    function: str | None
    detail: str | None
    wide: str | None
    paths: int
    differing: int
    ulps_largest: float | None
    ulps_median: float | None
    bias: float | None
    bias_low: float | None
    bias_high: float | None
    of_rmse: float | None
    where: WhereEntry | None
    explanation: str | None
    explained: int
    numpys_own: bool
    splits: Literal["not admissible", "within budget", "not concerned"]


class CastEntry(Entry, frozen=True, kw_only=True):
    """How often casts of a correction were ignored on one of its lines, in the run that had most of them."""

    file: str | None
    line: int | None
    count: int


class BranchesEntry(Entry, frozen=True, kw_only=True):
    """Which functions are the branches, what was tried, differed, was ignored, and could not be tried.

    `raised` holds, by format, what a function raised in it.
    """

    low: str
    correction: str
    tried: list[TriedEntry]
    mismatches: list[MismatchEntry]
    casts: list[CastEntry]
    raised: dict[str, str]
    remarks: list[str]
