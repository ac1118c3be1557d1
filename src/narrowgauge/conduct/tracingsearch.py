"""The search for the operation of one side at which it parts from the other."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Iterator, Sequence
from typing import Literal, NamedTuple

import numpy as np

from narrowgauge.conduct.tracing import Kept, Key, Trace
from narrowgauge.dispatch.setting import Place

__all__ = ["Found", "Kind", "searched"]

Kind = Literal["operation", "constant", "draws", "untraced"]

_NEAR = 256  # operations: a selection stands near those that made what it selects from


class Found(NamedTuple):
    """An operation that a search ended at, and the row of an operand that nothing made, if that is why."""

    number: int
    kind: Kind
    row: Key | None
    strange: Key | None


def searched(low: Trace, correction: Trace) -> list[Found | None]:
    """Return where each of two runs parts from the other, None where the other has everything that it returned.

    Of a run that told no quantity everything counts. Two runs of the same lines are compared by position.
    """
    same_lines = bool(low.operations) and _lines(low) == _lines(correction)
    judge = _ByPosition if same_lines else _ByValue
    return [judge(one, other, _leading(other)).first() for one, other in ((low, correction), (correction, low))]


class _Judge(ABC):
    """One side of a comparison: which of its rows the other side does not have."""

    def __init__(self, trace: Trace, other: Trace, there: set[Key]) -> None:
        self.trace = trace
        self.other = other
        self._there = there

    @abstractmethod
    def strange(self, number: int, operand: Kept, place: int) -> list[Key]:
        """Return the rows of operand number `place` of an operation that the other side does not have."""

    @abstractmethod
    def differing(self, number: int) -> list[Key]:
        """Return the rows of an operation's results that the other side does not have."""

    @abstractmethod
    def ends(self) -> list[Key]:
        """Return the rows that were returned and that the other side does not have."""

    def first(self) -> Found | None:
        """Return the first operation at which the two sides part."""
        trace = self.trace
        if trace.full or not trace.returned:
            return next(self._forwards(len(trace.operations)), None)
        found = min(self._backwards(self.ends()), key=lambda one: one.number, default=None)
        if found is None or found.kind != "untraced" or trace.lost is not None:
            return found  # what was not seen must not be blamed on another line
        return next(self._forwards(found.number), found)

    def _forwards(self, before: int) -> Iterator[Found]:
        """Yield the operations, in order, whose operands the other side has and whose results it has not."""
        for number in range(before):
            rows = self.differing(number)
            if rows and not self._strange(number):
                yield Found(number, "operation", rows[0], None)

    def _backwards(self, ends: Sequence[Key]) -> Iterator[Found]:
        """Yield where rows that the other side does not have come from."""
        pending: list[tuple[Key, int]] = [(key, len(self.trace.operations)) for key in ends]
        seen = set(pending)
        while pending:
            key, before = pending.pop()
            number = self._maker(key, before)
            if number is None:
                parts = self._parts(key, before)
                if not parts:
                    yield self._unmade(key, before)
                further = [(part, before) for part in parts]
            else:
                strange = self._strange(number)
                if not strange:
                    yield Found(number, "operation", key, None)
                further = [(row, number) for row in strange]
            pending += [one for one in dict.fromkeys(further) if one not in seen]
            seen.update(further)

    def _strange(self, number: int) -> list[Key]:
        operands = self.trace.operations[number].operands
        return [key for place, operand in enumerate(operands) for key in self.strange(number, operand, place)]

    def _maker(self, key: Key, before: int) -> int | None:
        """Return the last operation before another one that made a row."""
        return next((n for n in reversed(self.trace.made.get(key, ())) if n < before and self.differing(n)), None)

    def _unmade(self, key: Key, taken: int) -> Found:
        trace = self.trace
        kind: Kind = "untraced"
        if key in trace.draws_keys:
            kind = "draws"
        elif key in trace.constants or len(trace.rows[key]) == 1:
            kind = "constant"
        return Found(taken, kind, None, key)

    def _parts(self, key: Key, before: int) -> list[Key]:
        """Return the rows of which a selection can have made a row and that the other side does not have."""
        return [part for part in _selected(self.trace, key, before)[0] if self.lacks(part)]

    def lacks(self, key: Key) -> bool:
        """Whether the other side does not have a row in what leads to what it returned."""
        return key not in self._there


class _ByValue(_Judge):
    """Rows are looked for anywhere on the other side."""

    def strange(self, number: int, operand: Kept, place: int) -> list[Key]:
        """Return the rows of an operand that do not occur, however it is cut into rows."""
        missing = [[key for key in reading if self.lacks(key)] for reading in operand.readings]
        return min(missing, key=len)

    def differing(self, number: int) -> list[Key]:
        """Return the rows of the results that do not occur."""
        return [key for kept in self.trace.operations[number].results for key in kept.keys if self.lacks(key)]

    def ends(self) -> list[Key]:
        """Return the rows that were returned and do not occur."""
        return [key for key in self.trace.returned if self.lacks(key)]


class _ByPosition(_Judge):
    """Operations correspond to those of the other side with the same number, of the same line and name."""

    def strange(self, number: int, operand: Kept, place: int) -> list[Key]:
        """Return the rows of an operand that are others on the other side."""
        return _others(operand, self.other.operations[number].operands, place)

    def differing(self, number: int) -> list[Key]:
        """Return the rows of the results that are others on the other side."""
        there = self.other.operations[number].results
        results = enumerate(self.trace.operations[number].results)
        return [key for place, kept in results for key in _others(kept, there, place)]

    def ends(self) -> list[Key]:
        """Return the rows that were returned, where the other side returned others."""
        return [] if self.trace.returned == self.other.returned else list(self.trace.returned)


def _others(mine: Kept, theirs: Sequence[Kept], place: int) -> list[Key]:
    if place >= len(theirs) or len(mine.keys) != len(theirs[place].keys):
        return list(mine.keys)
    return [key for key, other in zip(mine.keys, theirs[place].keys, strict=True) if key != other]


def _lines(trace: Trace) -> list[tuple[Place | None, str]]:
    return [(operation.place, operation.name) for operation in trace.operations]


def _leading(trace: Trace) -> set[Key]:
    """Return the rows that lead to what a run returned: the other half of a correction can have the rows of this one.

    All that the run has where some row came about in a way that does not show.
    """
    rows = set[Key]()
    pending = [(key, len(trace.operations)) for key in trace.returned]
    seen = set(pending)
    if trace.full or not trace.returned:
        return set(trace.rows)
    while pending:
        key, before = pending.pop()
        rows.add(key)
        number = next((made for made in reversed(trace.made.get(key, ())) if made < before), None)
        if number is not None:
            operation = trace.operations[number]
            rows.update(*(reading for kept in operation.results for reading in kept.readings))
            further = [(row, number) for kept in operation.operands for reading in kept.readings for row in reading]
        elif key in trace.draws_keys or key in trace.constants or len(trace.rows[key]) == 1:
            continue
        else:
            parts, complete = _selected(trace, key, before)
            if not complete:
                return set(trace.rows)
            further = [(part, before) for part in parts]
        pending += [one for one in dict.fromkeys(further) if one not in seen]
        seen.update(further)
    return rows


def _selected(trace: Trace, key: Key, before: int) -> tuple[list[Key], bool]:
    """Return the rows of which a selection (`np.where`, a mask) can have made a row, and whether they make all of it.

    Of the operations just before, those that cover most of its paths, in turn.
    """
    row, open_ = trace.rows[key], np.ones(len(trace.kept), bool)
    parts: list[Key] = []
    if key in trace.draws_keys or row.shape != trace.kept.shape or len(row) == 1:
        return parts, False
    near = trace.operations[max(before - _NEAR, 0) : before]
    kept = [one for operation in near for one in (*operation.operands, *operation.results) if one.axis is not None]
    rows = list(dict.fromkeys(made for one in kept for made in one.keys if made != key))
    rows += [constant for constant in trace.constants if len(trace.rows[constant]) == 1]
    if not rows:
        return parts, False
    same = np.array([trace.values(made) for made in rows]).view(np.int64) == row.view(np.int64)
    while open_.any():
        covered = (same & open_).sum(axis=1)
        best = int(np.argmax(covered))
        if covered[best] == 0:
            return parts, False
        parts.append(rows[best])
        open_ &= ~same[best]
    return parts, True
