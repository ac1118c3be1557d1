"""How each elementary function is computed in a format of 8 or 16 bits, one word a function.

carrier    one operation in the float32 carrier, then one rounding (innocuous, see rounding.py)
exact      the result is a value of the format already: selections, signs, integral parts
truth      the result is a boolean
table      one operand: looked up in 65,536 entries made in float64 and rounded once; right to the last bit
           for every input, checked against MPFR, and the same on every processor
wide       two operands: computed in float64 and rounded once; not proved right for every pair, but power,
           arctan2 and hypot equal MPFR on all pairs of 600 edge values and on ten million random pairs

TF32 has no tables: functions of one operand are computed in float64 and rounded once, as is what `carrier` does not
serve (see `ways`). float32 and float64 functions are NumPy's own to nearest.

In the modes that are not to nearest what is `carrier` is computed with its error term (`terms`); functions of one
operand are decided beside the values of the format (functions.py), those of two operands are rounded once from float64,
with what is known of `hypot`, `arctan2`, `remainder`, `logaddexp` and `logaddexp2` beside values, and `power` of exact
results. float64 functions stay NumPy's own in every mode: there is nothing wider to round from.
"""

from __future__ import annotations

import math
import struct
from collections.abc import Callable, Sequence
from functools import cache, partial
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.errorterms import odd_sum
from narrowgauge.arithmetic.formats import FORMATS, Format
from narrowgauge.arithmetic.functions import decided
from narrowgauge.arithmetic.rounding import Doubles, Floats, Rounding, narrow

__all__ = ["WAYS", "Manner", "Way", "compute_wide", "decode", "encode", "look_up", "look_up_wide", "ways"]

Way = Literal["carrier", "exact", "truth", "table", "wide"]
# `native` is the carrier's own arithmetic, `terms` an operation with its error term.
Manner = Literal["carrier", "exact", "truth", "table", "wide", "native", "terms"]

_NAMES: dict[Way, str] = {
    "carrier": "add subtract multiply divide sqrt square reciprocal",
    "exact": "negative positive absolute fabs sign copysign maximum minimum fmax fmin floor ceil trunc rint fmod",
    "truth": "less less_equal equal not_equal greater greater_equal isfinite isinf isnan signbit "
    "logical_and logical_or logical_xor logical_not",
    "table": "exp exp2 expm1 log log2 log10 log1p sin cos tan arcsin arccos arctan sinh cosh tanh arcsinh "
    "arccosh arctanh cbrt deg2rad rad2deg degrees radians",
    "wide": "power float_power arctan2 hypot remainder floor_divide heaviside logaddexp logaddexp2",
}

WAYS: dict[np.ufunc, Way] = {getattr(np, name): way for way, names in _NAMES.items() for name in names.split()}


@cache
def ways(form: Format, rounding: Rounding) -> dict[np.ufunc, Manner]:
    """Return how an arithmetic computes each ufunc: the table above with its exceptions.

    TF32 products and quotients may be subnormal, where float32 has no bits to spare: they are rounded from float64.
    """
    found: dict[np.ufunc, Manner] = {}
    directed = rounding != "nearest"
    for ufunc, way in WAYS.items():
        if way == "truth":
            found[ufunc] = "truth"
        elif form.native and (not directed or way == "exact" or (form.precision == 53 and way != "carrier")):
            found[ufunc] = "native"
        elif way == "carrier" and directed:
            found[ufunc] = "terms"
        elif way == "table" and form.bits > 16:
            found[ufunc] = "wide"
        else:
            inexact = form.name == "tf32" and ufunc not in (np.add, np.subtract, np.sqrt)
            found[ufunc] = "terms" if way == "carrier" and inexact else way
    return found


def encode(values: Floats, form: Format) -> npt.NDArray[np.uint32]:
    """Return 16-bit patterns of float32-carried values, as uint32 of the same shape.

    binary16's own, and bfloat16's for every format that lies inside it: bfloat16 and those of 8 bits.
    """
    if form.precision <= 8:
        return np.asarray(values, np.float32).view(np.uint32) >> np.uint32(16)
    # Scaled by 2^-112 a binary16 value has the bit pattern of binary16, subnormals included, 13 bits higher.
    scaled = np.multiply(values, np.float32(2.0**-112), dtype=np.float32)
    bits = np.asarray(scaled).view(np.uint32)
    code = bits >> np.uint32(13)
    code &= np.uint32(0x7FFF)
    code |= (bits >> np.uint32(16)) & np.uint32(0x8000)
    return code


def decode(form: Format) -> npt.NDArray[np.float64]:
    """Return the values of all 65,536 patterns that `encode` may return, float64, in the order of the patterns."""
    patterns = np.arange(1 << 16, dtype=np.uint16)
    storage = FORMATS["bfloat16" if form.precision <= 8 else "float16"].storage
    with np.errstate(invalid="ignore"):
        values = patterns.view(storage).astype(np.float64)
    values[np.isnan(values)] = np.nan  # signalling patterns would raise warnings wherever they are read
    return values


@cache
def _table(ufunc: np.ufunc, form: Format, rounding: Rounding, flushed: bool) -> npt.NDArray[np.float32]:
    with np.errstate(all="ignore"):
        exact = ufunc(decode(form)) if rounding == "nearest" else decided(ufunc, decode(form))
        entries: npt.NDArray[Any] = narrow(exact, form, rounding, flushed=flushed)
    entries.setflags(write=False)
    return entries


@cache
def _wide_table(ufunc: np.ufunc, precision: int) -> Doubles:
    """Return the float64 values from which stochastic rounding starts."""
    form = FORMATS["bfloat16" if precision <= 8 else "float16"]
    entries = decided(ufunc, decode(form))
    entries.setflags(write=False)
    return entries


def look_up(
    ufunc: np.ufunc,
    values: Floats,
    form: Format,
    out: Floats | None,
    rounding: Rounding = "nearest",
    *,
    flushed: bool = False,
) -> Floats:
    """Return ufunc(values) rounded once, for float32 carriers of a format of 8 or 16 bits; into `out` if given."""
    table = _table(ufunc, form, rounding, flushed)
    if out is None and not isinstance(values, np.ndarray):
        single: Any = table[_pattern(values, form)]
        return single
    loop = compiled.kernel("look_up" if form.precision <= 8 else "look_up_half")
    if loop is not None and isinstance(values, np.ndarray) and values.dtype == np.float32 and values.flags.c_contiguous:
        found = np.empty(values.shape, np.float32) if out is None or not _apart(values, out) else out
        flat = values.reshape(-1)
        loop(flat.view(np.uint32) if form.precision <= 8 else flat, table, found.reshape(-1))
        if out is None or found is out:
            return found
    else:
        found = np.take(table, encode(values, form), mode="wrap")
        if out is None:
            return found
    out[...] = found
    return out


def _pattern(number: float, form: Format) -> int:
    """Return the pattern of one number as `encode` has it."""
    if form.precision <= 8:
        word: int = struct.unpack("<I", struct.pack("<f", number))[0]
        return word >> 16
    pattern: int = struct.unpack("<H", struct.pack("<e", number))[0]
    return pattern


def _apart(values: Floats, out: Floats) -> bool:
    """Whether a loop may write into `out` as it reads: the same places in the same order, or none of them."""
    if not out.flags.c_contiguous or out.shape != values.shape or out.dtype != np.float32:
        return False
    if values is out or not np.may_share_memory(values, out):
        return True
    start, other = values.__array_interface__["data"], out.__array_interface__["data"]
    return bool(start[0] == other[0])


def look_up_wide(ufunc: np.ufunc, values: Any, form: Format) -> Doubles:
    """Return ufunc(values) in float64, decided beside the values of the format, for one rounding in any mode."""
    if form.bits <= 16:
        return np.asarray(np.take(_wide_table(ufunc, form.precision), encode(values, form), mode="wrap"))
    return decided(ufunc, np.asarray(values, np.float64))


def compute_wide(ufunc: np.ufunc, operands: Sequence[Any], form: Format, rounding: Rounding = "nearest") -> Any:
    """Return a function of carried operands in float64, an array or scalar ready to be rounded once."""
    wide = [np.float64(operand) for operand in operands]
    if rounding != "nearest" and ufunc in _BESIDE:
        return _BESIDE[ufunc](*map(np.asarray, wide))
    found = ufunc(*wide)
    if ufunc is np.arctan2 and form.min_subnormal < 2.0**-27:
        # A quotient of two values may lie halfway between subnormals. Its arctangent is smaller by a third of
        # its cube, which float64 does not see. One float64 towards zero decides it; nothing else is so close.
        small = np.abs(found) < form.min_normal
        if small.any():
            return np.where(small, np.nextafter(found, np.copysign(0.0, found)), found)
    return found


def _remainder(x: Doubles, y: Doubles) -> Doubles:
    """Add the divisor, rounded to odd, to the exact remainder toward zero where their signs differ."""
    found = np.asarray(np.remainder(x, y))  # for its warnings, and its zeros
    with np.errstate(all="ignore"):
        exact = np.asarray(np.fmod(x, y))
        other = (exact != 0) & ((exact < 0) != (y < 0)) & np.isfinite(y)
        return np.where(other, odd_sum(exact, np.where(other, y, 0.0), np.empty_like(exact)), found)


def _hypotenuse(x: Doubles, y: Doubles) -> Doubles:
    """Keep it longer than its longer leg, if only by what float64 does not see."""
    found = np.asarray(np.hypot(x, y))
    longer, shorter = np.maximum(np.abs(x), np.abs(y)), np.minimum(np.abs(x), np.abs(y))
    beside = (found == longer) & (shorter > 0) & np.isfinite(found)
    return np.where(beside, np.nextafter(found, np.inf), found)


def _angle(y: Doubles, x: Doubles) -> Doubles:
    """Keep a small angle below its tangent, if only by what float64 does not see."""
    found = np.asarray(np.arctan2(y, x))
    small = (np.abs(found) < 2.0**-24) & (found != 0)
    return np.where(small, np.nextafter(found, 0.0), found)


def _power(x: Doubles, y: Doubles) -> Doubles:
    """Keep finite results off zero and infinity, and off 1 where neither the base nor the exponent makes them 1."""
    found = np.array(np.power(x, y))
    with np.errstate(all="ignore"):
        proper = np.isfinite(x) & np.isfinite(y) & (x != 0) & (y != 0) & (np.abs(x) != 1)
        np.copyto(found, np.copysign(5e-324, found), where=proper & (found == 0))
        np.copyto(found, np.copysign(np.finfo(np.float64).max, found), where=proper & np.isinf(found))
        beside = proper & (np.abs(np.abs(found) - 1.0) < 2.0**-50)
        target = np.where((np.abs(x) > 1) == (y > 0), np.inf, 0.0)
        np.copyto(found, np.copysign(np.nextafter(1.0, target), found), where=beside)
    return found


def _logarithm_of_sum(ufunc: np.ufunc, x: Doubles, y: Doubles) -> Doubles:
    """Keep it above its larger operand.

    log2(2^x + 2^x) is x + 1, and for small operands it is 1 + (x + y)/2 + (x - y)^2 log(2)/8 + ...: rounded to odd.
    """
    found = np.asarray(ufunc(x, y))
    with np.errstate(all="ignore"):
        larger = np.maximum(x, y)
        beside = (found == larger) & np.isfinite(x) & np.isfinite(y)
        found = np.where(beside, np.nextafter(found, np.inf), found)
        if ufunc is np.logaddexp2:
            beside = ((x == y) | (np.maximum(np.abs(x), np.abs(y)) < 2.0**-20)) & np.isfinite(x)
            more = 0.5 * (x + y) + (math.log(2.0) / 8.0) * np.square(x - y)
            found = np.where(beside, odd_sum(np.where(beside, more, 0.0), 1.0, np.empty_like(larger)), found)
    return found


_BESIDE: dict[np.ufunc, Callable[[Doubles, Doubles], Doubles]] = {
    np.power: _power,
    np.float_power: _power,
    np.remainder: _remainder,
    np.hypot: _hypotenuse,
    np.arctan2: _angle,
    np.logaddexp: partial(_logarithm_of_sum, np.logaddexp),
    np.logaddexp2: partial(_logarithm_of_sum, np.logaddexp2),
}
