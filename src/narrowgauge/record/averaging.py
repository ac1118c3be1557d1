"""The part of an audit's record that says what summing the planned paths in a format does to means and variances."""

from __future__ import annotations

from typing import Literal

from narrowgauge.record.plan import Entry

__all__ = ["AveragedEntry", "AveragingEntry", "FormatSumsEntry", "SumEntry"]


class SumEntry(Entry, frozen=True, kw_only=True):
    """Sums of values and of their squares in one format and order, and what they make of mean and variance.

    `bias` and `deviation` of the mean are in the unit of the quantity; `share` is their root mean square over the
    standard error of the mean. Those of the variance are relative to it. `largest` is how many paths may be summed
    before the share passes that of the audit, None from 2^53 on. The other figures are None without planned paths, and
    where a sum is past the format's range, which `reason` says.
    """

    bias: float | None
    deviation: float | None
    share: float | None
    variance_bias: float | None
    variance_deviation: float | None
    largest: int | None
    reason: Literal["no plan", "range"] | None


class FormatSumsEntry(Entry, frozen=True, kw_only=True):
    """One format: values added one after the other, and pairwise, as NumPy's `add.reduce` adds contiguous ones."""

    running: SumEntry
    pairwise: SumEntry


class AveragedEntry(Entry, frozen=True, kw_only=True):
    """The mean of one branch of one level: of D in the arm `narrow`, or of the correction from it to `wide`.

    Without a plan `paths` is None and the arm is the reference. `reason` says why nothing is known.
    """

    level: int
    branch: Literal["low", "correction"]
    narrow: str
    wide: str | None
    paths: int | None
    mean: float | None
    standard_error: float | None
    formats: dict[str, FormatSumsEntry]
    reason: Literal["no variance", "not sampled"] | None


class AveragingEntry(Entry, frozen=True, kw_only=True):
    """What summation may add to a mean is at most `share` of its standard error; `paths` were sampled on each level."""

    share: float
    paths: int
    quantities: dict[str, list[AveragedEntry]]
