"""Operations on formats of 24 bits and less in float64, so exact that one rounding in any mode is the right one.

A product of two values has 48 bits and is exact in float64. A sum is rounded to odd with the error term of the sum
(Knuth, "The Art of Computer Programming", volume 2, section 4.2.2, recalled from memory): of the two float64 on both
sides of the exact sum the one with an odd last bit stands for it. Rounding from there to 51 bits or less, in any mode,
gives what rounding the exact sum would: "Emulation of a FMA and correctly rounded sums: proved algorithms using
rounding to odd", IEEE Transactions on Computers 57(4), 2008, doi 10.1109/TC.2007.70819.

A quotient or a square root of values of p bits is a value of the format or differs from each by more than 2^-(2p+2)
of itself. Rounded to nearest in float64 it is on the same side of all values and equal to none, since 53 > 2p + 2.

No result here leaves the range of float64: exponents of float32 are at most doubled.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.rounding import Doubles
from narrowgauge.arithmetic.scratch import words64

__all__ = ["exact", "fused", "odd_sum"]


def exact(ufunc: np.ufunc, operands: Sequence[Any], *, negative_zero: bool) -> Doubles:
    """Return an operation of the way `carrier` on values of a format as float64 that stands for the exact result.

    `negative_zero` is the sign of a sum that is exactly zero, if its terms have not one sign: that of rounding down.
    The result lies in the thread's work space.
    """
    shape, size = _shape(operands)
    out = words64("exact", shape, size).view(np.float64)
    first, *rest = operands
    if ufunc is np.add:
        return odd_sum(first, rest[0], out, negative_zero=negative_zero)
    if ufunc is np.subtract:
        return odd_sum(first, np.negative(rest[0]), out, negative_zero=negative_zero)
    if ufunc is np.square:
        np.multiply(first, first, out=out, dtype=np.float64)
    elif ufunc is np.reciprocal:
        np.divide(1.0, first, out=out, dtype=np.float64)
    else:
        ufunc(first, *rest, out=out, dtype=np.float64)
    return out


def fused(x: Any, y: Any, z: Any, *, negative_zero: bool) -> Doubles:
    """Return x y + z of values of a format as float64 that stands for the exact result, in the thread's work space."""
    shape, size = _shape((x, y))
    product = np.multiply(x, y, out=words64("product", shape, size).view(np.float64), dtype=np.float64)
    shape, size = _shape((x, y, z))
    return odd_sum(product, z, words64("exact", shape, size).view(np.float64), negative_zero=negative_zero)


def odd_sum(left: Any, right: Any, out: Doubles, *, negative_zero: bool = False) -> Doubles:
    """Return the sum rounded to odd, in `out`: exact, or the float64 beside the exact sum that has an odd last bit."""
    total: Doubles = np.add(left, right, out=out, dtype=np.float64)
    together = compiled.kernel("odd")
    with np.errstate(invalid="ignore", over="ignore"):  # of the error term of an infinite sum
        if together is not None:
            together(total, left, right, out=total)
        else:
            _make_odd(total, left, right)
    if negative_zero:
        zero = np.asarray(total == 0)
        if zero.any():
            np.copyto(total, -0.0, where=zero & (np.signbit(left) | np.signbit(right)))
    return total


def _shape(operands: Sequence[Any]) -> tuple[tuple[int, ...], int]:
    shape = np.broadcast_shapes(*map(np.shape, operands))
    return shape, math.prod(shape)


def _make_odd(total: Doubles, left: Any, right: Any) -> None:
    """Move an inexact sum whose last bit is even to the float64 on the other side of the exact one."""
    shape, size = total.shape, total.size
    part = words64("part", shape, size).view(np.float64)
    rest = words64("rest", shape, size).view(np.float64)
    np.subtract(total, left, out=part)
    np.subtract(total, part, out=rest)
    np.subtract(left, rest, out=rest, dtype=np.float64)
    np.subtract(right, part, out=part, dtype=np.float64)
    np.add(rest, part, out=rest)
    inexact = np.asarray((rest < 0) | (rest > 0))  # neither for NaN
    bits, step = total.view(np.int64), part.view(np.int64)
    np.bitwise_xor(rest.view(np.int64), bits, out=step)
    np.right_shift(step, 63, out=step)
    np.bitwise_or(step, 1, out=step)  # 1 away from zero, -1 toward it
    inexact &= np.equal(np.bitwise_and(bits, 1, out=rest.view(np.int64)), 0)
    np.multiply(step, inexact, out=step)
    np.add(bits, step, out=bits)
