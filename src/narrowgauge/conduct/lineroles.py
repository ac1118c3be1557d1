"""What each line of a kernel does, seen from runs without rounding: how often, in which role, with which constants.

Roles follow from two runs of different numbers of steps: a line that runs more often with more steps belongs to a step,
one that does not runs before all steps or after them. Of the former those are the state's whose result is used again
at an earlier place of the same code, or at the same: values flow forward through a body that is run once, so that such
a value was carried into the next step. Where a kernel stores each step's result in an array of all steps, that is not
seen, and the line counts as one of a step.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence, Set
from dataclasses import dataclass
from types import CodeType
from typing import Any

import numpy as np

from narrowgauge.dispatch.placed import Operation
from narrowgauge.dispatch.setting import Place, Route, Setting, Way
from narrowgauge.record.lines import Role

__all__ = ["Seen", "lasting", "roles"]

_SUMS = ("add", "subtract")
_CLAMPS = ("clip", "maximum", "minimum")  # of a sum: on all paths that they do not hold back it is their result
_LATEST = 512  # results that are remembered: a value used later than so many operations on is not followed


@dataclass(frozen=True, slots=True)
class _Result:
    """Where a value was computed. Holds the value, so that its id stays."""

    code: CodeType
    operation: Operation
    value: Any


class Seen:
    """An observer of one run: operations by line, the order of the lines, results that are carried on, constants."""

    def __init__(self) -> None:
        self.operations: Counter[Place] = Counter()  # calls of the arithmetic
        self.values: Counter[Place] = Counter()  # numbers that were rounded, or would be
        self.first: dict[Place, int] = {}
        self.last: dict[Place, int] = {}
        self.carried: set[Place] = set()
        self.constants: set[tuple[Place | None, float]] = set()
        self._additions: Counter[Operation] = Counter()  # to what the same line left a step ago
        self._clamps: set[Operation] = set()  # of such additions, on the same line
        self._feeds: set[tuple[Operation, Operation]] = set()
        self._back: set[Operation] = set()
        self._results: dict[int, _Result] = {}
        self._number = 0

    def saw(self, setting: Setting, operation: str, route: Route, operands: Sequence[Any], result: Any) -> None:
        """Take note of one operation."""
        frame = setting.frame()
        if frame is None:
            return
        place = Place(frame.f_code.co_filename, frame.f_lineno)
        self._number += 1
        self.operations[place] += 1
        self.first.setdefault(place, self._number)
        self.last[place] = self._number
        if route != "exact":
            self.values[place] += max(map(np.size, operands), default=1) if route == "accumulated" else np.size(result)
        in_place = [result] if operation in _SUMS else []  # its first operand is seen as a copy
        here = Operation(place, frame.f_lasti)
        added = False
        for one in self._known([*operands, *in_place]):
            if one.code is frame.f_code and here.instruction <= one.operation.instruction:
                self._back.add(one.operation)
                self.carried.add(one.operation.place)
                added |= one.operation.place == place
            elif one.operation.place == place and (
                one.operation in self._additions or (operation in _CLAMPS and one.operation in self._clamps)
            ):
                self._feeds.add((one.operation, here))
                added = True
        if added and operation in _SUMS:
            self._additions[here] += np.size(result)
        elif added and operation in _CLAMPS:
            self._clamps.add(here)
        if isinstance(result, (np.ndarray, float, np.floating)):
            self._results.pop(id(result), None)  # so that it stands last
            self._results[id(result)] = _Result(frame.f_code, here, result)
            if len(self._results) > _LATEST:
                del self._results[next(iter(self._results))]

    def met(self, setting: Setting, constant: Any) -> None:
        """Take note of a plain number; arrays are constants in any case."""
        if isinstance(constant, (float, int, np.number)):
            try:
                self.constants.add((setting.where(), float(constant)))
            except OverflowError:  # an integer past float64
                return

    def decided(self, setting: Setting, answer: bool) -> None:
        """Pass over a decision, which is no operation."""

    def left(self, setting: Setting, way: Way) -> None:
        """Pass over what leaves, which is no operation."""

    @property
    def sums(self) -> dict[Operation, int]:
        """The additions x = x + e of lines that leave x to the next step, and how many numbers they have computed.

        In x = x + a + b both are such additions, and in x = maximum(x + a, 0) the one; in x = x + c * (m - x) the
        difference is none.
        """
        left = set(self._back)
        while more := {one for one, other in self._feeds if other in left & self._clamps and one not in left}:
            left |= more
        found = {one for one in self._additions if one in left}
        while more := {one for one, other in self._feeds if other in found and one not in found}:
            found |= more
        return {one: count for one, count in self._additions.items() if one in found}

    def _known(self, operands: Sequence[Any]) -> Iterator[_Result]:
        for operand in operands:
            known = self._results.get(id(operand))
            if known is not None:
                yield known


def lasting(runs: Sequence[Seen]) -> Set[tuple[Place | None, float]]:
    """Return the constants that all runs met on the same lines: those of other step sizes do not depend on it."""
    return set.intersection(*(run.constants for run in runs))


def roles(few: Seen, many: Seen) -> dict[Place, Role | None]:
    """Return the roles of the lines of two runs, of fewer and of more steps; None where no line depends on them."""
    stepping = {place for place, count in many.operations.items() if count > few.operations[place]}
    if not stepping:
        return dict.fromkeys(many.operations)
    begin = min(many.first[place] for place in stepping)
    end = max(many.last[place] for place in stepping)
    found: dict[Place, Role | None] = {}
    for place in many.operations:
        if place in stepping:
            found[place] = "state" if place in many.carried else "step"
        elif many.first[place] > end:
            found[place] = "payoff"
        else:
            found[place] = "set-up" if many.last[place] < begin else None
    return found
