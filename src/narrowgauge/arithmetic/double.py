"""Operations of float64 in every mode: a float64 result, what it lacks of the exact one, and one rounding of both.

An exact result is (high + low) 2^exponent: `high` the nearest float64 of a result whose operands were scaled to
significands near 1, so that no error term is lost below the range, and `low` the rest, its sign exact and its size
right to 53 bits. Sums and products: Dekker, "A floating-point technique for extending the available precision",
Numerische Mathematik 18, 1971, doi 10.1007/BF01397083. Quotients and roots: the remainder is a float64. x y + z: the
algorithm of "Emulation of a FMA and correctly rounded sums: proved algorithms using rounding to odd", IEEE Transactions
on Computers 57(4), 2008, doi 10.1109/TC.2007.70819. `_settled` then takes the float64 that a mode asks for.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, NamedTuple

import numpy as np

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.errorterms import odd_sum
from narrowgauge.arithmetic.rounding import Doubles, Rounding
from narrowgauge.arithmetic.scratch import words64

__all__ = ["computed", "fused"]

Uniforms = Callable[[tuple[int, ...]], Doubles]

_FAR = 300  # exponents further apart than this: one operand is no more than a sign to the other


class Exact(NamedTuple):
    """(high + low) 2^exponent, arrays of one shape; what is no number counts as zero in `low`."""

    high: Doubles
    low: Doubles
    exponent: Any


def computed(ufunc: np.ufunc, operands: Sequence[Any], rounding: Rounding, uniforms: Uniforms) -> Doubles:
    """Return an operation of the way `carrier` on float64, rounded once in a mode other than to nearest.

    `uniforms` gives numbers in [0, 1) of a shape, for stochastic rounding.
    """
    first, *rest = (np.asarray(operand, np.float64) for operand in operands)
    shape = np.shape(ufunc(first, *rest))  # also for its warnings
    numbers = uniforms(shape) if rounding == "stochastic" else None
    if ufunc is np.square:
        ufunc, rest = np.multiply, [first]
    elif ufunc is np.reciprocal:
        ufunc, first, rest = np.divide, np.asarray(1.0), [first]
    elif ufunc is np.subtract:
        ufunc, rest = np.add, [-rest[0]]
    with np.errstate(all="ignore"):
        found = _compiled(ufunc, (first, *rest), shape, rounding, numbers)
        if found is None:
            found = _settled(_WAYS[ufunc](first, *rest), rounding, numbers)
        if rounding == "down" and ufunc is np.add:
            np.copyto(found, -0.0, where=(found == 0) & (np.signbit(first) | np.signbit(rest[0])))
    return found


def fused(x: Any, y: Any, z: Any, rounding: Rounding, uniforms: Uniforms) -> Doubles:
    """Return x y + z of float64, rounded once in any mode."""
    x, y, z = np.broadcast_arrays(*(np.asarray(operand, np.float64) for operand in (x, y, z)))
    with np.errstate(all="ignore"):
        exact = _product_and_sum(x, y, z)
        found = _settled(exact, rounding, uniforms(x.shape) if rounding == "stochastic" else None)
        finite = np.isfinite(x) & np.isfinite(y)
        special = np.where(finite & np.isinf(z), z, np.multiply(x, y) + z)
        np.copyto(found, special, where=~(finite & np.isfinite(z)))
        minus = np.signbit(x) ^ np.signbit(y)
        sign = np.where((z == 0) & ((x == 0) | (y == 0)) & (minus == np.signbit(z)), minus, rounding == "down")
        np.copyto(found, np.where(sign, -0.0, 0.0), where=exact.high == 0)
    return found


def _compiled(
    ufunc: np.ufunc, operands: Sequence[Doubles], shape: tuple[int, ...], rounding: Rounding, numbers: Any
) -> Doubles | None:
    """Return the same from compiled loops where every number is moderate, so that none needs scaling; else None."""
    loop = compiled.kernel(f"rest_{ufunc.__name__}")
    move = compiled.kernel("moved_at_random" if rounding == "stochastic" else "moved")
    if loop is None or move is None:
        return None
    found = np.empty(shape)
    flat, rest = found.reshape(-1), words64("rest", (found.size,), found.size).view(np.float64)
    dense = (np.ascontiguousarray(np.broadcast_to(operand, shape)).reshape(-1) for operand in operands)
    if not loop(*dense, flat, rest):
        return None
    if rounding == "stochastic":
        move(flat, rest, numbers.reshape(-1))
    else:
        move(flat, rest, *(int(rounding == mode) for mode in ("up", "down", "zero")))
    return found


def _sum(x: Doubles, y: Doubles) -> Exact:
    """Take the larger term first, which gives the error in one step, and lower down where both are huge."""
    lift = np.where(np.minimum(np.abs(x), np.abs(y)) > 2.0**900, 8, 0)
    x, y = np.ldexp(x, -lift), np.ldexp(y, -lift)
    swap = np.abs(x) < np.abs(y)
    large, little = np.where(swap, y, x), np.where(swap, x, y)
    high = large + little
    return Exact(high, little - (high - large), lift)


def _product(x: Doubles, y: Doubles) -> Exact:
    (x, left), (y, right) = np.frexp(x), np.frexp(y)
    high = np.multiply(x, y)
    return Exact(high, _rest_of_product(x, y, high), left + right)


def _quotient(x: Doubles, y: Doubles) -> Exact:
    (x, left), (y, right) = np.frexp(x), np.frexp(y)
    high = np.divide(x, y)
    product = high * y
    remainder = (x - product) - _rest_of_product(high, y, product)
    return Exact(high, remainder / y, left - right)


def _root(x: Doubles) -> Exact:
    x, exponent = np.frexp(x)
    odd = exponent % 2
    x, exponent = np.ldexp(x, odd), exponent - odd
    high = np.sqrt(x)
    product = high * high
    remainder = (x - product) - _rest_of_product(high, high, product)
    return Exact(high, remainder / (2.0 * high), exponent // 2)


def _product_and_sum(x: Doubles, y: Doubles, z: Doubles) -> Exact:
    """Bring the three operands to one exponent, or as near to it as still matters, and add without loss."""
    product = _product(x, y)
    z, own = np.frexp(z)
    first = np.where(product.high == 0, own, product.exponent)  # a zero has no exponent of its own
    apart = np.where(z == 0, 0, own - first)
    z = np.ldexp(z, np.clip(apart, -_FAR, _FAR))
    exponent = np.where(apart > _FAR, own - _FAR, first)
    upper, lower = _two_sum(z, product.low)
    head, tail = _two_sum(product.high, upper)
    rest = odd_sum(lower, tail, np.empty_like(lower))
    high = head + rest
    return Exact(high, rest - (high - head), exponent)


_WAYS: dict[np.ufunc, Callable[..., Exact]] = {
    np.add: _sum,
    np.multiply: _product,
    np.divide: _quotient,
    np.sqrt: _root,
}


def _two_sum(x: Doubles, y: Doubles) -> tuple[Doubles, Doubles]:
    total = x + y
    part = total - x
    return total, (x - (total - part)) + (y - part)


def _rest_of_product(x: Doubles, y: Doubles, product: Doubles) -> Doubles:
    (a, b), (c, d) = _halves(x), _halves(y)
    return ((a * c - product) + a * d + b * c) + b * d


def _halves(x: Doubles) -> tuple[Doubles, Doubles]:
    """Split into two numbers of 26 bits."""
    wide = x * 134217729.0
    upper = wide - (wide - x)
    return upper, x - upper


def _settled(exact: Exact, rounding: Rounding, uniforms: Any) -> Doubles:
    """Return the float64 that a mode takes; stochastic rounding treats the end of the range as if it went on."""
    high, low, exponent = exact
    lift: Any = 0
    if rounding == "stochastic":
        lift = np.where(np.frexp(high)[1] + exponent > 1000, 16, 0)
        exponent = exponent - lift
    near = np.asarray(np.ldexp(high, exponent))
    cut = _number(high - np.ldexp(near, -exponent))  # lost where the result is subnormal, or overflows
    low = _number(low)
    rest = cut + low
    if rounding == "up":
        return np.where(rest > 0, np.nextafter(near, np.inf), near)
    if rounding == "down":
        return np.where(rest < 0, np.nextafter(near, -np.inf), near)
    if rounding == "zero":
        outside = ((rest > 0) & (near < 0)) | ((rest < 0) & (near > 0))
        return np.where(outside, np.nextafter(near, 0.0), near)
    side = np.copysign(np.inf, cut if rounding == "nearest" else rest)
    other = np.nextafter(near, side)
    gap = np.abs(np.ldexp(other, -exponent) - np.ldexp(near, -exponent))
    if rounding == "nearest":  # the first rounding made a tie of what is none
        tie = (cut != 0) & (2.0 * np.abs(cut) == gap) & np.isfinite(near)
        return np.where(tie & (cut * low > 0), other, near)
    outward = np.signbit(rest) == np.signbit(near)  # the other one is the larger
    place = np.abs(rest) / gap  # exact, where a product with a small gap would not be
    chosen = np.where((uniforms < np.where(outward, place, 1.0 - place)) == outward, other, near)
    return np.asarray(np.ldexp(np.where(rest == 0, near, chosen), lift))


def _number(values: Any) -> Any:
    return np.where(np.isnan(values), 0.0, values)
