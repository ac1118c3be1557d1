"""Whether one rounding less explains how two branches part."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any, Literal

import numpy as np

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic.formats import FORMATS, Format
from narrowgauge.arithmetic.rounding import Doubles
from narrowgauge.conduct.firstdifference import Located, Side
from narrowgauge.conduct.tracing import Kept, Key, Operation, Trace

__all__ = ["Cause", "explains"]

Cause = Literal["fused multiply-add", "wider intermediate"]

_WIDER = ("float32", "float64")


def explains(located: Located, low: Trace, correction: Trace, form: Format) -> Cause | None:
    """Return what explains the located difference on every kept path, if anything does; `form` is the narrow format.

    "fused multiply-add": one side rounds a product and then a sum, and the other has the row of the exact product plus
    the third number, rounded once; so it has where product and sum are computed in a wider format and nothing else is.
    "wider intermediate": the other side has the row of the same operation in float32 or float64, or the constant that
    rounds to this side's.
    """
    sides = ((located.low, low, correction), (located.correction, correction, low))
    if any(_is_fused(side, trace, other, form) for side, trace, other in sides):
        return "fused multiply-add"
    if any(_is_wider(side, trace, other, form) for side, trace, other in sides) or _constants(located, form):
        return "wider intermediate"
    return None


def _is_fused(side: Side | None, trace: Trace, other: Trace, form: Format) -> bool:
    """Whether the other side has a product and sum of this side's, rounded once."""
    if side is None or side.kind != "operation":
        return False
    arithmetic = arithmetic_named(form.name)
    for product, total, row in _products(trace, side.number):
        factors = [_row(trace, operand, product, row) for operand in product.operands]
        place = next(place for place, kept in enumerate(total.operands) if row in kept.keys)
        given = total.results[0].keys[product.results[0].keys.index(row)]
        term = _row(trace, total.operands[1 - place], total, given)
        numbers = [value for value in (*factors, term, trace.rows[row], trace.rows[given]) if value is not None]
        if len(numbers) < 5 or not all(map(arithmetic.holds, numbers)):
            continue  # where this side does not round it is the one that rounds less
        first, second, third = (value.astype(form.carrier) for value in numbers[:3])
        if total.name == "subtract":
            first, third = (first, np.negative(third)) if place == 0 else (np.negative(first), third)
        if _occurs(arithmetic.fma(first, second, third), other, trace):
            return True
    return False


def _products(trace: Trace, number: int) -> Iterator[tuple[Operation, Operation, Key]]:
    """Yield the products, and the sums of as many rows that they feed, of which an operation is one; with their row."""
    located = trace.operations[number]
    for one, product in enumerate(trace.operations):
        if product.name != "multiply" or (located.name == "multiply" and one != number):
            continue
        rows = product.results[0].keys
        for two in range(one + 1, len(trace.operations)) if one == number else (number,):
            total = trace.operations[two]
            if two <= one or total.name not in ("add", "subtract") or len(total.results[0].keys) != len(rows):
                continue
            for row in rows:
                if any(row in kept.keys for kept in total.operands):
                    yield product, total, row


def _is_wider(side: Side | None, trace: Trace, other: Trace, form: Format) -> bool:
    """Whether the other side has this side's operation as a wider format rounds it."""
    if side is None or side.kind != "operation":
        return False
    operation = trace.operations[side.number]
    ufunc = getattr(np, operation.name, None)
    if not isinstance(ufunc, np.ufunc) or ufunc.nin != len(operation.operands) or ufunc.nout != 1:
        return False
    for row in operation.results[0].keys:
        operands = [_row(trace, operand, operation, row) for operand in operation.operands]
        if any(operand is None for operand in operands):
            continue
        for name in _WIDER:
            wide = FORMATS[name]
            if wide.precision > form.precision:
                with np.errstate(all="ignore"):
                    found = ufunc(*(np.asarray(operand, wide.carrier) for operand in operands))
                if _occurs(found, other, trace):
                    return True
    return False


def _constants(located: Located, form: Format) -> bool:
    """Whether one side takes a constant that rounds to the other side's."""
    sides = [side for side in (located.low, located.correction) if side is not None and side.kind == "constant"]
    if len(sides) < 2:
        return False
    numbers = [side.strange for side in sides if side.strange is not None]
    arithmetic = arithmetic_named(form.name)
    rounded = {float(arithmetic.cast(np.asarray(number))[()]) for number in numbers}
    return len(rounded) == 1 and len(set(numbers)) == 2


def _row(trace: Trace, operand: Kept, operation: Operation, row: Key) -> Doubles | None:
    """Return the row of an operand that goes into a row of the result; None where more than one does."""
    results = operation.results[0].keys
    if len(operand.keys) == len(results):
        key = operand.keys[results.index(row)]
    elif len(operand.keys) == 1:
        key = operand.keys[0]
    else:
        return None
    values = trace.rows[key]
    return values if values.shape in (trace.kept.shape, (1,)) else None


def _occurs(values: Any, other: Trace, trace: Trace) -> bool:
    """Whether a row, one value for each kept path, is the other side's and not this one's."""
    kept = Trace(len(trace.kept)).keep(np.broadcast_to(values, trace.kept.shape))
    return kept is not None and kept.keys[0] in other.rows and kept.keys[0] not in trace.rows
