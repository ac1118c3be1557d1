"""The part of an audit's record that says what the range of each format does to a kernel, line by line."""

from __future__ import annotations

from typing import Literal

from narrowgauge.record.plan import Entry

__all__ = [
    "LineArmEntry",
    "LineRangeEntry",
    "NonfiniteEntry",
    "RangeLevelEntry",
    "ShareEntry",
    "ShiftEntry",
    "ShiftLevelEntry",
    "WatchedArmEntry",
    "WatchedEntry",
]


class LineArmEntry(Entry, frozen=True, kw_only=True):
    """What happens to the results of one operation on one line in one arm.

    `headroom_above` is how many powers of two lie between the largest result in the reference and the format's largest
    number, `headroom_below` between the smallest one and the smallest normal number; negative where that is passed.
    Overflows come of finite operands; a result that is 0 although no operand is, and though the exact one is not, is
    an underflow. The rest is of additions and subtractions alone: `lost` of them left the larger operand as it was
    although the smaller one is not 0, first on step `first_lost`; bits are cancelled where the exponent of the result
    is below that of the larger operand, all of them where the result is 0.
    """

    headroom_above: int | None
    headroom_below: int | None
    overflows: int
    subnormals: int
    underflows: int
    additions: int
    lost: int
    first_lost: int | None
    cancelled_mean: float | None
    cancelled_most: int | None


class LineRangeEntry(Entry, frozen=True, kw_only=True):
    """Results of one operation on one line: how many, and their magnitudes in the reference, zeros left out.

    `smallest` and `largest` are exponents e of 2^e <= |x| < 2^(e + 1). Where only a narrow arm came by, its own count.
    """

    file: str | None
    line: int | None
    operation: str
    results: int
    smallest: int | None
    largest: int | None
    arms: dict[str, LineArmEntry]


class ShareEntry(Entry, frozen=True, kw_only=True):
    """A share of all additions, or of all results, with its interval."""

    count: int
    of: int
    share: float | None
    share_low: float | None
    share_high: float | None


class NonfiniteEntry(Entry, frozen=True, kw_only=True):
    """The first result that is not finite: where, and of which operands; None for one that is not finite itself.

    `step` is how often that place in the code had run before for this path, `path` None where no axis is that of the
    paths. Operands are None, too, where the operation takes whole arrays.
    """

    file: str | None
    line: int | None
    operation: str
    kind: Literal["infinite", "not a number"]
    step: int
    path: int | None
    operands: list[float | None]


class WatchedArmEntry(Entry, frozen=True, kw_only=True):
    """One arm on one level: `lost` additions among all, and results `below` the normal range among all.

    Below are subnormals and underflows. `stopped` is what ended the run before its end.
    """

    lost: ShareEntry
    below: ShareEntry
    overflows: int
    first_nonfinite: NonfiniteEntry | None
    stopped: str | None


class RangeLevelEntry(Entry, frozen=True, kw_only=True):
    """The fine paths of one level."""

    level: int
    steps: int
    paths: int
    arms: dict[str, WatchedArmEntry]
    lines: list[LineRangeEntry]


class ShiftLevelEntry(Entry, frozen=True, kw_only=True):
    """One level without and with the shift; error variances by quantity."""

    level: int
    overflows: int
    subnormals: int
    underflows: int
    error_variance: dict[str, float | None]
    shifted_overflows: int
    shifted_subnormals: int
    shifted_underflows: int
    shifted_error_variance: dict[str, float | None]


class ShiftEntry(Entry, frozen=True, kw_only=True):
    """What a format does whose exponents are all `exponent` higher, which centres it on what the kernel computes.

    Where all that a kernel computes scales with its inputs, scaling these by 2^-exponent does the same.
    """

    exponent: int
    levels: list[ShiftLevelEntry]
    stopped: str | None


class WatchedEntry(Entry, frozen=True, kw_only=True):
    """A run on a few paths with every operation looked at; shares have intervals at this confidence.

    Additions inside one call (np.sum, np.cumsum, a product of matrices) are not looked at one by one. `shifts` has the
    arms whose results pass an end of their range.
    """

    confidence: float
    levels: list[RangeLevelEntry]
    shifts: dict[str, ShiftEntry]
