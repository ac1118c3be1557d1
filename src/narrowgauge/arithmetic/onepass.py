"""Operations of float16 and bfloat16, each with its rounding, as inner loops of NumPy ufuncs: one pass instead of two.

Imported by `compiled.py` alone, once numba is there. A loop is vectorised only where the compiler sees that all steps
are those of dense arrays, or none at all, and that what is written is read nowhere else: hence the cases of `_binary`.
Roundings use integers where a comparison of NaN would raise the invalid flag, so that the flags of a ufunc are those of
its operation.
"""

from __future__ import annotations

import operator
from collections.abc import Callable
from typing import Any

import numpy as np
from numba import carray  # type: ignore[attr-defined]
from numba.extending import register_jitable

__all__ = ["PASSES"]

Loop = Callable[[Any, Any, Any, Any], None]
Number = Any  # a float32

_SIGN, _SIZE, _EXPONENT = np.uint32(0x80000000), np.uint32(0x7FFFFFFF), np.uint32(0x7F800000)
_ONE, _SIXTEEN, _HALF, _MASK = np.uint32(1), np.uint32(16), np.uint32(0x7FFF), np.uint32(0xFFFF0000)
# Bits of 2^-14 and 2^15, the least and the greatest power of two of binary16, and of its largest number.
_LEAST, _GREATEST, _TOP = np.uint32(0x38800000), np.uint32(0x47000000), np.uint32(0x477FE000)
_LIFTED = np.uint32(0x06C00000)  # what multiplies a power of two by 1.5 x 2^13
_UNIT = np.float32(1.0)


@register_jitable
def float16(number: Number) -> Number:
    """Round by adding and subtracting 1.5 x 2^23 spacings, as `rounding.py` does."""
    word = np.float32(number).view(np.uint32)
    power = word & _EXPONENT
    power = power if power > _LEAST else _LEAST
    power = power if power < _GREATEST else _GREATEST
    shift = np.uint32(power + _LIFTED).view(np.float32)
    found = np.float32((np.float32(number) + shift) - shift).view(np.uint32)
    size = found & _SIZE
    found = _EXPONENT if (size > _TOP) & (size < _EXPONENT) else found
    return np.uint32(found | (word & _SIGN)).view(np.float32)


@register_jitable
def bfloat16(number: Number) -> Number:
    """Round by dropping bits."""
    word = np.float32(number).view(np.uint32)
    return np.uint32((word + ((word >> _SIXTEEN) & _ONE) + _HALF) & _MASK).view(np.float32)


@register_jitable
def _square(number: Number) -> Number:
    return number * number


@register_jitable
def _reciprocal(number: Number) -> Number:
    return _UNIT / number


def _binary(operation: Any, rounded: Any) -> Loop:
    """Return the loop of an operation on two operands; the steps are in bytes."""

    def loop(places: Any, counts: Any, steps: Any, data: Any) -> None:  # noqa: PLR0912  # of cases
        count = counts[0]
        left, right, into = places[0], places[1], places[2]
        one, other, found = carray(left, count), carray(right, count), carray(into, count)
        over_left, over_right = found.ctypes.data == one.ctypes.data, found.ctypes.data == other.ctypes.data
        if steps[0] == 4 and steps[1] == 4 and steps[2] == 4:
            if over_left:
                for i in range(count):
                    found[i] = rounded(operation(found[i], other[i]))
            elif over_right:
                for i in range(count):
                    found[i] = rounded(operation(one[i], found[i]))
            else:
                for i in range(count):
                    found[i] = rounded(operation(one[i], other[i]))
        elif steps[0] == 4 and steps[1] == 0 and steps[2] == 4:
            number = other[0]
            if over_left:
                for i in range(count):
                    found[i] = rounded(operation(found[i], number))
            else:
                for i in range(count):
                    found[i] = rounded(operation(one[i], number))
        elif steps[0] == 0 and steps[1] == 4 and steps[2] == 4:
            number = one[0]
            if over_right:
                for i in range(count):
                    found[i] = rounded(operation(number, found[i]))
            else:
                for i in range(count):
                    found[i] = rounded(operation(number, other[i]))
        else:
            at, beside, to = steps[0] // 4, steps[1] // 4, steps[2] // 4
            for i in range(count):
                into[i * to] = rounded(operation(left[i * at], right[i * beside]))

    return loop


def _unary(operation: Any, rounded: Any) -> Loop:
    """Return the loop of an operation on one operand."""

    def loop(places: Any, counts: Any, steps: Any, data: Any) -> None:
        count = counts[0]
        given, into = places[0], places[1]
        one, found = carray(given, count), carray(into, count)
        if steps[0] == 4 and steps[1] == 4:
            if found.ctypes.data == one.ctypes.data:
                for i in range(count):
                    found[i] = rounded(operation(found[i]))
            else:
                for i in range(count):
                    found[i] = rounded(operation(one[i]))
        else:
            at, to = steps[0] // 4, steps[1] // 4
            for i in range(count):
                into[i * to] = rounded(operation(given[i * at]))

    return loop


_TWO = {"add": operator.add, "subtract": operator.sub, "multiply": operator.mul, "divide": operator.truediv}
_SINGLE = {"sqrt": np.sqrt, "square": _square, "reciprocal": _reciprocal, "positive": operator.pos}

# Of each name, the format's and NumPy's, the loop and the number of operands; "positive" is the rounding alone.
PASSES: dict[str, tuple[Loop, int]] = {
    f"{rounded.__name__} {name}": (make(operation, rounded), operands)
    for rounded in (float16, bfloat16)
    for make, table, operands in ((_binary, _TWO, 2), (_unary, _SINGLE, 1))
    for name, operation in table.items()
}
