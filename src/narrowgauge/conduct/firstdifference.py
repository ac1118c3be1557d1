"""The first operation in which two branches differ, found by value.

By position a statement that was moved would look like a difference. By value it is the first operation of each side
whose operands all occur on the other side, row by row along the paths, and whose result does not. It is looked for
backwards from what was returned, through rows alone that the other side does not have: what is computed beside, or is
computed in another way and comes out the same, is no difference.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from math import frexp, ldexp

import numpy as np

from narrowgauge.arithmetic.formats import Format
from narrowgauge.arithmetic.rounding import Doubles
from narrowgauge.conduct.tracing import Kept, Key, Operation, Trace
from narrowgauge.conduct.tracingsearch import Found, Kind, searched
from narrowgauge.dispatch.setting import Place

__all__ = ["Kind", "Located", "Side", "first_difference"]

Values = float | tuple[float, ...]

_MOST_SHOWN = 8  # values of an operand that is no single one on a path
_WORST: tuple[Kind, ...] = ("untraced", "draws", "constant", "operation")


@dataclass(frozen=True, slots=True, kw_only=True)
class Side:
    """The first differing operation of one side, with its values on the example path.

    `kind`: "operation", where all operands occur on the other side; "constant" or "draws", where an operand that no
    operation made does not, and `strange` is its value; "untraced", where that operand varies over the paths but was
    made where the trace could not see. `number` counts the operations of the run from 0. `couples`: the operation
    has operands with the axis of the paths and a result without, so that each path depends on the others.
    """

    kind: Kind
    place: Place | None
    operation: str
    number: int
    operands: tuple[Values, ...]
    result: Values
    strange: float | None
    couples: bool

    def __str__(self) -> str:
        place = "" if self.place is None else f"{os.path.basename(self.place.file)}:{self.place.line}: "
        if self.kind == "draws":
            return f"{place}{self.operation} takes the draw {_shown(self.strange)}"
        if self.kind == "constant":
            return f"{place}{self.operation} takes the constant {_shown(self.strange)}"
        if self.kind == "untraced":
            return f"{place}{self.operation} takes {_shown(self.strange)}, which was made out of sight"
        return f"{place}{self.operation} of {', '.join(map(_shown, self.operands))} gives {_shown(self.result)}"


@dataclass(frozen=True, slots=True, kw_only=True)
class Located:
    """Where two branches part. A side is None where the other side has everything that it computed.

    `path` is the example, by its number in the run of the low branch: the first on which what was returned differs, or
    the results of the two operations do. `ulps` is how far the two results are apart on it in ulps of the low branch's
    format, None where the two operations do not have the same operands. `incomplete` says in words why a side may be
    wrong or missing, None where it is not.
    """

    low: Side | None
    correction: Side | None
    path: int
    ulps: float | None
    incomplete: str | None

    @property
    def kind(self) -> Kind:
        """What differs first: the draws, a constant, an operation; "untraced" where it cannot be told."""
        kinds = {side.kind for side in (self.low, self.correction) if side is not None}
        return next((kind for kind in _WORST if kind in kinds), "untraced")

    def __str__(self) -> str:
        sides = [str(side) for side in (self.low, self.correction) if side is not None]
        if self.incomplete is None or not sides:
            return " where ".join(sides) or str(self.incomplete)
        return f"{' where '.join(sides)} ({self.incomplete})"


def first_difference(low: Trace, correction: Trace, *, form: Format) -> Located | None:
    """Return where two traced runs part, or None where both gave the same rows, and where nothing can be found.

    Both traces keep the same paths in the same order. `form` is the low branch's format, for `ulps`.
    Where both ran the same lines in the same order (one function in two batch sizes), operations are compared by
    position, which needs no luck however few the paths.
    """
    if len(low.kept) != len(correction.kept):
        raise ValueError(f"{len(low.kept)} paths are to be compared with {len(correction.kept)}")
    if low.returned and low.returned == correction.returned:
        return None
    traces = (low, correction)
    found = searched(low, correction)
    if (low.full or correction.full) and None in found:  # the end of a trace looks like a difference
        found = [None, None]
    elif found == [None, None]:
        return None
    column, ulps = _example(traces, found, form)
    sides = [None if one is None else _side(trace, one, column) for trace, one in zip(traces, found, strict=True)]
    return Located(
        low=sides[0],
        correction=sides[1],
        path=int(low.kept[column]),
        ulps=ulps,
        incomplete=_incomplete(traces, found),
    )


def _example(traces: Sequence[Trace], found: Sequence[Found | None], form: Format) -> tuple[int, float | None]:
    """Return the column of the example path, and how many ulps the two results are apart if their operands are one."""
    rows = _pair(traces, found)
    if rows is not None:
        different = _different(*rows)
        if different is not None:
            first, second = (float(row[different]) for row in rows)
            return different, _ulps(first, second, form)
    ends = [trace.values(trace.returned[0]) for trace in traces if trace.returned]
    return (_different(*ends) if len(ends) == 2 else None) or 0, None


def _pair(traces: Sequence[Trace], found: Sequence[Found | None]) -> list[Doubles] | None:
    """Return the rows that two operations make of the same operands, None for other operands."""
    operations, places, rows = [], [], []
    for trace, one in zip(traces, found, strict=True):
        if one is None or one.row is None:
            return None
        operation = trace.operations[one.number]
        operations.append(sorted(kept.keys for kept in operation.operands))
        keys = operation.results[0].keys
        if one.row not in keys:
            return None
        places.append(keys)
        rows.append(one.row)
    if operations[0] != operations[1] or len(places[0]) != len(places[1]):
        return None
    index = places[0].index(rows[0])
    return [trace.values(keys[index]) for trace, keys in zip(traces, places, strict=True)]


def _different(one: Doubles, other: Doubles) -> int | None:
    """Return the first place with other bits."""
    if one.shape != other.shape:
        return None
    different = np.ascontiguousarray(one).view(np.int64) != np.ascontiguousarray(other).view(np.int64)
    return int(np.argmax(different)) if different.any() else None


def _ulps(one: float, other: float, form: Format) -> float | None:
    """Return how far apart two numbers are in ulps of the first in a format; None for what is not finite."""
    if not np.isfinite([one, other]).all():
        return None
    exponent = max(frexp(one)[1] - 1, form.emin) if one else form.emin
    return abs(one - other) / ldexp(1.0, exponent - form.precision + 1)


def _side(trace: Trace, found: Found, column: int) -> Side:
    """Return what is told of a side."""
    strange = None if found.strange is None else _at(trace, found.strange, column)
    if found.number >= len(trace.operations):
        assert strange is not None  # only what was returned is looked for behind the last operation
        return Side(
            kind=found.kind, place=None, operation="return", number=found.number,
            operands=(), result=strange, strange=strange, couples=False,
        )  # fmt: skip
    operation = trace.operations[found.number]
    result = next((kept for kept in operation.results if found.row in kept.keys), operation.results[0])
    index = result.keys.index(found.row) if found.row in result.keys else 0
    return Side(
        kind=found.kind,
        place=operation.place,
        operation=operation.name,
        number=found.number,
        operands=tuple(_value(trace, kept, index, len(result.keys), column) for kept in operation.operands),
        result=_at(trace, result.keys[index], column),
        strange=strange,
        couples=_couples(operation),
    )


def _couples(operation: Operation) -> bool:
    return any(kept.axis is not None for kept in operation.operands) and all(
        kept.axis is None for kept in operation.results
    )


def _value(trace: Trace, kept: Kept, index: int, count: int, column: int) -> Values:
    """Return what an operand is on a path: one number, those of all its rows, or those of an array without paths."""
    keys = kept.keys
    if kept.axis is None and kept.shape:
        numbers = [float(number) for key in keys[:_MOST_SHOWN] for number in trace.rows[key][:_MOST_SHOWN]]
        return tuple(numbers[:_MOST_SHOWN])
    if len(keys) in (1, count):
        return _at(trace, keys[index if len(keys) == count else 0], column)
    return tuple(_at(trace, key, column) for key in keys[:_MOST_SHOWN])


def _at(trace: Trace, key: Key, column: int) -> float:
    row = trace.rows[key]
    return float(row[column if row.shape == trace.kept.shape else 0])


def _incomplete(traces: Sequence[Trace], found: Sequence[Found | None]) -> str | None:
    """Return why a side may be wrong or missing."""
    if any(trace.full for trace in traces):
        count = max(len(trace.operations) for trace in traces if trace.full)
        return f"not found within {count} operations" if found == [None, None] else f"of the first {count} operations"
    for trace, one in zip(traces, found, strict=True):
        if one is not None and one.kind == "untraced" and trace.lost is not None:
            place = trace.lost[0]
            where = "" if place is None else f" at {os.path.basename(place.file)}:{place.line}"
            return f"the trace is incomplete: what is met{where} was computed out of its sight"
    if any(one is not None and one.kind == "untraced" for one in found):
        return "the trace is incomplete: a selection or a store that it does not see comes between"
    return None


def _shown(value: Values | None) -> str:
    return "(" + ", ".join(map(repr, value)) + ")" if isinstance(value, tuple) else repr(value)
