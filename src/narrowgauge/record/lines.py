"""The part of an audit's record that says which lines cost the accuracy; an audit without [lines] has none of it."""

from __future__ import annotations

from typing import Final, Literal

from narrowgauge.record.plan import Entry

__all__ = [
    "CARRIED",
    "FormatLines",
    "LineEntry",
    "LinesEntry",
    "PartShare",
    "PaysEntry",
    "QuantityLines",
    "ShareEntry",
    "SourceLine",
    "SumEntry",
    "WhatIfEntry",
    "WideningEntry",
]

Kind = Literal["line", "draws", "step size", "constants"]
Role = Literal["state", "step", "payoff", "set-up"]
CARRIED: Final = "carried errors"  # the what-if that needs an addition to the state


class LineEntry(Entry, frozen=True, kw_only=True):
    """A part of the kernel that is rounded: a source line, the draws, the step size, or all other constants.

    `operations` is the share of the operations, by number of values, that run on the line, of those that round; draws
    count as one operation each. `role`: the line's result is carried into the next step (state), it runs in every step
    (step), once after all steps (payoff) or before them (set-up); None where that cannot be told.
    """

    kind: Kind
    file: str | None
    line: int | None
    role: Role | None
    operations: float


class ShareEntry(Entry, frozen=True, kw_only=True):
    """A share of a variance, three ways, each with its interval; None where a run gave values that are not finite.

    `alone`: only this part is rounded. `saved`: all others are. `share` is the mean of the two.
    """

    alone: float | None
    alone_low: float | None
    alone_high: float | None
    saved: float | None
    saved_low: float | None
    saved_high: float | None
    share: float | None
    share_low: float | None
    share_high: float | None


class PartShare(Entry, frozen=True, kw_only=True):
    """The shares of one part, by its place in the list of parts: in Var E, and in Var R where levels are coupled."""

    part: int
    error: ShareEntry
    correction: ShareEntry | None


class SumEntry(Entry, frozen=True, kw_only=True):
    """One variance, to what the shares in it add up (1 where nothing interacts), and why they may not be there."""

    variance: float | None
    total: ShareEntry | None
    reason: str | None


class QuantityLines(Entry, frozen=True, kw_only=True):
    """The shares of every part for one quantity."""

    error: SumEntry
    correction: SumEntry | None
    parts: list[PartShare]


class PaysEntry(Entry, frozen=True, kw_only=True):
    """How far a changed narrow format pays, where a step costs `step_cost`.

    `level` is the finest level on which it pays on all levels up to it, `possible` the finest not refuted; `gain` and
    `edge` are those of `level`, for the quantity with the smallest edge.
    """

    step_cost: float
    level: int | None
    possible: int | None
    gain: float | None
    gain_low: float | None
    gain_high: float | None
    edge: float | None
    edge_low: float | None
    edge_high: float | None


class WideningEntry(PaysEntry, frozen=True, kw_only=True):
    """A set of parts, by their places, kept in the wider format.

    `operations` is the share of the operations that is charged at the wide cost.
    """

    parts: list[int]
    operations: float


class WhatIfEntry(PaysEntry, frozen=True, kw_only=True):
    """The same kernel in another arithmetic, by name."""

    name: str


class SourceLine(Entry, frozen=True, kw_only=True):
    """A line of the user's code, as it stood when it was measured."""

    file: str
    line: int
    text: str


class FormatLines(Entry, frozen=True, kw_only=True):
    """The study of one narrow format, on one level.

    `plain` is the format without any widening, on the paths of the search; `widenings` are the sets that push the
    finest paying level further, from cheapest to best. None where there was no search, and `what_ifs` where none were
    asked for. `reason` says why a figure is
    missing.
    """

    level: int
    steps: int
    paths: int
    wide: str | None
    parts: list[LineEntry]
    quantities: dict[str, QuantityLines]
    plain: WideningEntry | None
    widenings: list[WideningEntry] | None
    what_ifs: list[WhatIfEntry] | None
    reason: str | None


class LinesEntry(Entry, frozen=True, kw_only=True):
    """The studies by format, and the source lines around the lines that were found; `reason` is what stopped it."""

    formats: dict[str, FormatLines]
    source: list[SourceLine]
    reason: str | None
