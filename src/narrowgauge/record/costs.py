"""The part of an audit's record that holds measured costs: the one figure that each audit measures anew."""

from __future__ import annotations

from narrowgauge.record.plan import Entry

__all__ = ["CostEntry"]


class CostEntry(Entry, frozen=True, kw_only=True):
    """The cost of one step of one path in a format, float64 being 1, from the median of `runs` times of the kernel.

    The times are of one step of one path, in nanoseconds, on a machine as `provenance` says; the formats were run in
    turns. --resume keeps them; a new audit of the same file measures others.
    """

    cost: float
    nanoseconds: float
    fastest: float
    slowest: float
    runs: int
