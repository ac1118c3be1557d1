"""How each elementary function is computed in a 16-bit format, one word a function.

carrier    one operation in the float32 carrier, then one rounding (innocuous, see rounding.py)
exact      the result is a value of the format already: selections, signs, integral parts
truth      the result is a boolean
table      one operand: looked up in 65,536 entries made in float64 and rounded once; right to the last bit
           for every input, checked against MPFR, and the same on every processor
wide       two operands: computed in float64 and rounded once; not proved right for every pair, but power,
           arctan2 and hypot equal MPFR on all pairs of 600 edge values and on ten million random pairs

float32 and float64 functions are NumPy's own.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import FORMATS, Format
from narrowgauge.arithmetic.rounding import Floats, narrow

__all__ = ["WAYS", "Way", "compute_wide", "decode", "encode", "look_up"]

Way = Literal["carrier", "exact", "truth", "table", "wide"]

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


def encode(values: Floats, form: Format) -> npt.NDArray[np.uint32]:
    """Return the 16-bit storage patterns of float32-carried values, as uint32 of the same shape."""
    if form.emax == 127:
        return np.asarray(values, np.float32).view(np.uint32) >> np.uint32(16)
    # Scaled by 2^-112 a binary16 value has the bit pattern of binary16, subnormals included, 13 bits higher.
    scaled = np.multiply(values, np.float32(2.0**-112), dtype=np.float32)
    bits = np.asarray(scaled).view(np.uint32)
    code = bits >> np.uint32(13)
    code &= np.uint32(0x7FFF)
    code |= (bits >> np.uint32(16)) & np.uint32(0x8000)
    return code


def decode(form: Format) -> npt.NDArray[np.float64]:
    """Return the values of all 65,536 patterns of a 16-bit format, float64, in the order of the patterns."""
    patterns = np.arange(1 << 16, dtype=np.uint16)
    with np.errstate(invalid="ignore"):
        values = patterns.view(form.storage).astype(np.float64)
    values[np.isnan(values)] = np.nan  # signalling patterns would raise warnings wherever they are read
    return values


@cache
def _table(ufunc: np.ufunc, name: str) -> npt.NDArray[np.float32]:
    form = FORMATS[name]
    with np.errstate(all="ignore"):
        entries: npt.NDArray[Any] = narrow(ufunc(decode(form)), form)
    entries.setflags(write=False)
    return entries


def look_up(ufunc: np.ufunc, values: Floats, form: Format, out: Floats | None) -> Floats:
    """Return ufunc(values) rounded once, for float32 carriers of a 16-bit format; into `out` if given."""
    found = np.take(_table(ufunc, form.name), encode(values, form), mode="wrap")
    if out is None:
        return found
    out[...] = found
    return out


def compute_wide(ufunc: np.ufunc, operands: Sequence[Any], form: Format) -> Any:
    """Return a function of two carried operands in float64, an array or scalar ready to be rounded once."""
    found = ufunc(*map(np.float64, operands))
    if ufunc is np.arctan2 and form.min_subnormal < 2.0**-27:
        # A quotient of two values may lie halfway between subnormals. Its arctangent is smaller by a third of
        # its cube, which float64 does not see. One float64 towards zero decides it; nothing else is so close.
        small = np.abs(found) < form.min_normal
        if small.any():
            return np.where(small, np.nextafter(found, np.copysign(0.0, found)), found)
    return found
