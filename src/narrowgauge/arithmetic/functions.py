"""Functions of one operand in float64 such that rounding once in any mode gives what the exact value would.

A float64 function errs by about one unit in its last place. To nearest that is harmless for narrow formats. In a
directed mode it matters where the exact value lies closer than that to a value of the format: either it is that value,
or it lies on a known side of it. Both are decided here from what is known of the function:

exact       by the theorem of Lindemann and Weierstrass exp, log, sine and their relatives of algebraic numbers are
            algebraic in 0 or 1 alone; exp2, log2, log10 and the cube root have the exact cases of integers
beside      f(x) next to x for small x, next to 1 for small x, next to +-1 where tanh and expm1 saturate, and beyond the
            range of float64, with the side from the first term of the series
"""

from __future__ import annotations

from typing import Any

import numpy as np

from narrowgauge.arithmetic.rounding import Doubles

__all__ = ["decided"]

# f(x) = x + c x^3 + ...: 1 where c > 0 (away from zero), -1 where c < 0; one unit decides below 2^-24.
_CUBIC = {
    np.sin: -1, np.tan: 1, np.arcsin: 1, np.arctan: -1, np.sinh: 1, np.tanh: -1, np.arcsinh: -1, np.arctanh: 1,
}  # fmt: skip
# f(x) = x + c x^2 + ...: up or down, below 2^-49.
_SQUARE = {np.expm1: np.inf, np.log1p: -np.inf}
_OVERFLOWING = (np.exp, np.exp2, np.expm1, np.sinh, np.cosh)
_TENS = np.array([10.0**power for power in range(23)])  # exact in float64


def decided(ufunc: np.ufunc, x: Doubles) -> Doubles:
    """Return ufunc(x) in float64, exact where it is a value of 24 bits or less, and else on the right side of all.

    Where neither rule applies the library's value stands, whose error could cross a value of a format of p bits for
    about one input in 2^(51 - p).
    """
    with np.errstate(all="ignore"):
        found = np.array(ufunc(x), np.float64)
        size = np.abs(x)
        small = size > 0
        if ufunc in _CUBIC:
            small &= size < 2.0**-24
            target: Any = np.copysign(np.inf, x) if _CUBIC[ufunc] > 0 else 0.0
            _put(found, small, np.nextafter(x, target))
        elif ufunc in _SQUARE:
            _put(found, small & (size < 2.0**-49), np.nextafter(x, _SQUARE[ufunc]))
        elif ufunc in (np.exp, np.exp2):
            _put(found, small & (size < 2.0**-50), np.nextafter(1.0, np.copysign(np.inf, x)))
        elif ufunc in (np.cos, np.cosh):
            _put(found, small & (size < 2.0**-25), np.nextafter(1.0, 0.0 if ufunc is np.cos else np.inf))
        _saturated(ufunc, x, found)
        _whole(ufunc, x, found)
    return found


def _put(found: Doubles, where: Any, values: Any) -> None:
    np.copyto(found, values, where=where)


def _saturated(ufunc: np.ufunc, x: Doubles, found: Doubles) -> None:
    """Keep finite arguments off the limits of a function."""
    finite = np.isfinite(x)
    if ufunc is np.tanh:
        _put(found, finite & (np.abs(x) > 18), np.copysign(np.nextafter(1.0, 0.0), x))
    if ufunc is np.expm1:
        _put(found, finite & (x < -34), np.nextafter(-1.0, 0.0))
    if ufunc in (np.exp, np.exp2):
        _put(found, finite & (found == 0), 5e-324)
    if ufunc in _OVERFLOWING:
        _put(found, finite & np.isinf(found), np.copysign(np.finfo(np.float64).max, found))


def _whole(ufunc: np.ufunc, x: Doubles, found: Doubles) -> None:
    """Put exact results where integers have them."""
    if ufunc is np.exp2:
        whole = (x == np.rint(x)) & (np.abs(x) < 1000)
        _put(found, whole, np.ldexp(1.0, np.where(whole, x, 0).astype(np.int64)))
    elif ufunc is np.log2:
        fraction, exponent = np.frexp(x)
        _put(found, fraction == 0.5, exponent - 1.0)
    elif ufunc is np.log10:
        power = np.clip(np.rint(np.where(np.isnan(found), 0, found)), 0, 22)
        _put(found, _TENS[power.astype(np.int64)] == x, power)
    elif ufunc is np.cbrt:
        fraction, exponent = np.frexp(found)
        root = np.ldexp(np.rint(np.ldexp(fraction, 9)), exponent - 9)  # a cube of 24 bits has a root of 8
        _put(found, root * root * root == x, root)
