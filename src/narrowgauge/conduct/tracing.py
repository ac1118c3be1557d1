"""What one run computes, operation by operation, kept by value: the rows of each operand and result over the paths.

An array with an axis of the paths is kept as rows, each a vector over the paths; an array without is kept by its last
axis, a number is a row of its own, and so is a row whose values are all one number. Rows are known by their values as
float64 and never by their type, so that float16 in float16 storage and in a float32 carrier are the same rows.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from narrowgauge.dispatch.setting import Place, Route, Setting, Way

__all__ = ["MOST_OPERATIONS", "MOST_PATHS", "MOST_ROWS", "Trace"]

MOST_PATHS = 256
MOST_OPERATIONS = 1 << 16
MOST_ROWS = 1 << 16


class Trace:
    """An Observer of one run that keeps place, name, operands and result of every operation.

    `paths` is the number of paths of the run; `kept` are those of them, by number, whose values are kept and compared,
    at most MOST_PATHS, in the order in which the other trace has them: all of the first MOST_PATHS by default. Give more
    than a few where you can (paths that agree do no harm): rows of one or two paths of a 16-bit format are alike by
    chance. Operations past MOST_OPERATIONS, and all after the one with which MOST_ROWS different rows are there, are
    not kept: `full` is True then.
    """

    def __init__(self, paths: int, kept: Sequence[int] | None = None) -> None:
        raise NotImplementedError

    def draws(self, values: Any) -> None:
        """Keep the draws that the run is given, an array of any type with an axis of the paths, as its input rows."""

    def gave(self, values: Any) -> None:
        """Keep the quantity in question that the run returned, (paths,): only what leads to it is compared."""

    def saw(self, setting: Setting, operation: str, route: Route, operands: Sequence[Any], result: Any) -> None:
        """Keep one operation."""

    def met(self, setting: Setting, constant: Any) -> None:
        """Keep a constant, rounded as it meets the state."""

    def decided(self, setting: Setting, answer: bool) -> None:
        """Decisions are no part of the comparison."""

    def left(self, setting: Setting, way: Way) -> None:
        """Neither is what leaves."""

    @property
    def lost(self) -> Place | None:
        """The first line where an array met the traced ones that varies over the paths and that no traced line made."""
        raise NotImplementedError
