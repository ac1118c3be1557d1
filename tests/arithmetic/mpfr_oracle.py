"""The outside reference of these tests: MPFR through gmpy2, exact rationals, and the inputs to ask about.

Values travel as float64 arrays, which hold every format's values exactly. The shapes of the formats are
stated here a second time, so that a slip in the program's own table shows as a difference.
"""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from math import inf, isfinite
from typing import Any

import gmpy2  # type: ignore[import-untyped, import-not-found, unused-ignore]  # comes without annotations
import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.formats import FORMATS

Doubles = npt.NDArray[np.float64]
Numbers = npt.NDArray[np.object_]
Function = Callable[..., Any]

SIXTEEN_BITS = ("float16", "bfloat16")
EIGHT_BITS = ("e4m3", "e5m2")
NAMES = ("float16", "bfloat16", "float32", "float64")
ALL = (*EIGHT_BITS, "float16", "bfloat16", "tf32", "float32", "float64")

# Precision, largest exponent, bits that differ: IEEE 754-2019, table 3.5, vendor formats, and OCP OFP8 revision 1.0;
# recalled from memory. E4M3's largest exponent is one more than its bias, since it has no infinities.
SHAPES = {
    "e4m3": (4, 8, 8),
    "e5m2": (3, 15, 8),
    "tf32": (11, 127, 19),
    "float16": (11, 15, 16),
    "bfloat16": (8, 127, 16),
    "float32": (24, 127, 32),
    "float64": (53, 1023, 64),
}

# NumPy's name of each operation, MPFR's, and the number of operands.
BASIC = {
    "add": ("add", 2),
    "subtract": ("sub", 2),
    "multiply": ("mul", 2),
    "divide": ("div", 2),
    "sqrt": ("sqrt", 1),
}

# NumPy's name of each function of one operand, and MPFR's.
UNARY = {
    **{name: name for name in ("exp", "exp2", "expm1", "log", "log2", "log10", "log1p", "cbrt")},
    **{name: name for name in ("sin", "cos", "tan", "sinh", "cosh", "tanh")},
    **{f"arc{name}": f"a{name}" for name in ("sin", "cos", "tan", "sinh", "cosh", "tanh")},
}

LOGARITHMS = ("logaddexp", "logaddexp2")

# 400 bits, and exponents that no result here leaves: what MPFR has no function for is rounded from here.
WIDE = gmpy2.context(precision=400)


MODES = {
    "nearest": gmpy2.RoundToNearest,
    "zero": gmpy2.RoundToZero,
    "up": gmpy2.RoundUp,
    "down": gmpy2.RoundDown,
}


def least_exponent(name: str) -> int:
    """Return the exponent of the smallest normal number."""
    return -6 if name == "e4m3" else 1 - SHAPES[name][1]


def context(name: str, rounding: str = "nearest") -> Any:
    """Return MPFR's context of a format; its exponents are of significands in [1/2, 1): one more than ours."""
    precision, emax, _ = SHAPES[name]
    emin = least_exponent(name) + 2 - precision
    return gmpy2.context(precision=precision, emax=emax + 1, emin=emin, subnormalize=True, round=MODES[rounding])


def fitted(values: Doubles, name: str, rounding: str = "nearest", *, flushed: bool = False) -> Doubles:
    """Return MPFR's results as the format has them: E4M3 ends at 448 without infinities; subnormals may be flushed."""
    values = values.copy()
    if name == "e4m3":
        over = np.abs(values) > 448.0
        outward = np.where(values > 0, rounding in ("nearest", "up"), rounding in ("nearest", "down"))
        values[over] = np.where(outward | np.isinf(values), np.nan, np.copysign(448.0, values))[over]
    if flushed:
        small = np.abs(values) < 2.0 ** least_exponent(name)
        values[small] = np.copysign(0.0, values[small])
    return values


def to_mpfr(values: Doubles, name: str) -> Numbers:
    """Return float64 values as MPFR numbers rounded to the format, an object array."""
    return np.fromiter(map(context(name).plus, values.tolist()), dtype=object, count=values.size)


def reckon(function: Function, *operands: Numbers) -> Doubles:
    """Return a function of MPFR numbers for object arrays of one length, as float64."""
    return np.fromiter(map(float, map(function, *operands)), np.float64, operands[0].size)


def unary(function: str, values: Numbers, name: str, rounding: str = "nearest") -> Doubles:
    """Return NumPy's function of that name in a format of 8 or 16 bits, correctly rounded."""
    return fitted(_unary(function, values, context(name, rounding)), name, rounding)


def _unary(function: str, values: Numbers, form: Any) -> Doubles:
    if function in UNARY:
        return reckon(getattr(form, UNARY[function]), values)
    special: dict[str, Function] = {
        "sqrt": form.sqrt,
        "square": lambda value: form.mul(value, value),  # gmpy2's own square rounds subnormals twice
        "reciprocal": lambda value: form.div(1, value),
    }
    if function in special:
        return reckon(special[function], values)
    half_turn = WIDE.const_pi()
    numerator, denominator = {
        "deg2rad": (half_turn, 180),
        "radians": (half_turn, 180),
        "rad2deg": (180, half_turn),
        "degrees": (180, half_turn),
    }[function]
    factor = WIDE.div(numerator, denominator)  # not gmpy2's own, which rounds twice
    return reckon(lambda value: form.plus(WIDE.mul(value, factor)), values)


def logarithm_of_sum(function: str) -> Function:
    """Return log(exp(x) + exp(y)), or the same to the base 2, of MPFR numbers, in 400 bits; NaN gives NaN.

    A term that vanishes beside the other in 400 bits leaves the next number above it, for the modes to see.
    """
    base = 1 if function == "logaddexp" else WIDE.log(2)

    def exact(left: Any, right: Any) -> Any:
        low, high = sorted((left, right))
        if not isfinite(low) or not isfinite(high):
            return left + right if gmpy2.is_nan(left) or gmpy2.is_nan(right) else WIDE.add(high, 0)
        if low == high:
            return WIDE.add(high, WIDE.div(WIDE.log(2), base))
        part = WIDE.log1p(WIDE.exp(WIDE.mul(WIDE.sub(low, high), base)))
        found = WIDE.add(high, WIDE.div(part, base))
        return gmpy2.next_above(found) if found == high else found

    return exact


def differ(got: npt.NDArray[Any], want: Doubles) -> npt.NDArray[np.intp]:
    """Return where two arrays differ in any bit; all NaNs count as one, the two zeros do not."""
    with np.errstate(invalid="ignore"):
        wide = np.ascontiguousarray(got).astype(np.float64)
    unlike = wide.view(np.uint64) != want.view(np.uint64)
    unlike &= ~(np.isnan(wide) & np.isnan(want))
    return np.flatnonzero(unlike)


def computed(name: str, function: str, *operands: Doubles, **mode: Any) -> npt.NDArray[Any]:
    """Return what the program computes: `Arithmetic.apply` on the carriers of these values, in a mode if given."""
    arithmetic = Arithmetic(format=FORMATS[name], **mode)
    with np.errstate(all="ignore"):
        carriers = [operand.astype(arithmetic.format.carrier) for operand in operands]
        result: npt.NDArray[Any] = arithmetic.apply(getattr(np, function), carriers)
    return result


def values_of(patterns: npt.NDArray[np.uint64], name: str) -> Doubles:
    """Return the values of a format's bit patterns as float64, from the definition of the encoding."""
    precision, emax, bits = SHAPES[name]
    if name == "float64":
        return patterns.view(np.float64)
    bias = 1 - least_exponent(name)
    fraction = (patterns & np.uint64((1 << (precision - 1)) - 1)).astype(np.float64)
    exponent = (patterns >> np.uint64(precision - 1)).astype(np.int64) & (2 * bias + 1)
    hidden = np.where(exponent > 0, 2.0 ** (precision - 1), 0.0)
    values: Doubles = np.ldexp(fraction + hidden, np.maximum(exponent, 1) - bias - precision + 1)
    if name == "e4m3":
        values[values == 480.0] = np.nan
    else:
        special = exponent == 2 * emax + 1
        values[special] = np.where(fraction[special] == 0, inf, np.nan)
    return np.where(patterns >> np.uint64(bits - 1) == 1, -values, values)


def all_values(name: str) -> Doubles:
    """Return the values of all patterns of a format of 8 or 16 bits, in the order of the patterns."""
    return values_of(np.arange(1 << SHAPES[name][2], dtype=np.uint64), name)


def edge_values(name: str) -> Doubles:
    """Return 601 to 659 values where rounding can go wrong: 300 or more magnitudes in both signs, and NaN.

    All 256 of an 8-bit format. Of the others:

    Zero, infinity, both ends of the subnormals and of the normals, 1 and what is near it, powers of two with
    their neighbours all over the range and closely around 1, and random patterns to make up 300.
    """
    precision, emax, bits = SHAPES[name]
    if bits == 8:
        return all_values(name)
    unit = 1 << (precision - 1)
    infinity = (2 * emax + 1) * unit
    patterns = {0, infinity}
    patterns.update(range(1, 25), range(unit - 24, unit + 24), range(infinity - 24, infinity))
    patterns.update(range(emax * unit - 16, emax * unit + 17))
    middle = range(max(2, emax - precision - 2), min(emax + precision + 3, 2 * emax))
    for exponent in [
        *middle[:: max(1, len(middle) // 16)],
        *np.linspace(2, 2 * emax, 14).astype(int).tolist(),
    ]:
        patterns.update(exponent * unit + step for step in (-2, -1, 0, 1, 2))
        patterns.add(exponent * unit + unit // 2)
    generator = np.random.default_rng(20_250_601)
    while len(patterns) < 300:
        patterns.add(int(generator.integers(1, infinity)))
    magnitudes = values_of(np.array(sorted(patterns), np.uint64), name)
    return np.concatenate([magnitudes, -magnitudes, [np.nan]])


def all_pairs(values: npt.NDArray[Any]) -> tuple[npt.NDArray[Any], npt.NDArray[Any]]:
    """Return every value beside every value, both orders, each with itself."""
    return np.repeat(values, values.size), np.tile(values, values.size)


def random_pairs(name: str, count: int, seed: int) -> tuple[Doubles, Doubles]:
    """Return `count` pairs: half are random patterns, half have exponents so close that they interact."""
    precision, emax, bits = SHAPES[name]
    generator = np.random.default_rng(seed)
    wild, tame = count // 2, count - count // 2
    patterns = generator.integers(0, (1 << bits) - 1, (2, wild), dtype=np.uint64, endpoint=True)
    bias, last = 1 - least_exponent(name), 2 * emax if name != "e4m3" else 14
    first = generator.integers(max(bias - 8, 0), min(bias + 9, last + 1), tame)
    second = np.clip(first + generator.integers(-precision - 2, precision + 3, tame), 0, last)
    sign = generator.integers(0, 2, (2, tame), dtype=np.uint64) << np.uint64(bits - 1)
    fraction = generator.integers(0, 1 << (precision - 1), (2, tame), dtype=np.uint64)
    close = sign | (np.stack([first, second]).astype(np.uint64) << np.uint64(precision - 1)) | fraction
    left, right = values_of(np.concatenate([patterns, close], axis=1), name)
    return np.ascontiguousarray(left), np.ascontiguousarray(right)


def exactly(value: Fraction, name: str) -> float:
    """Return a rational rounded to nearest, ties to even, by integer arithmetic alone; a zero is positive."""
    precision, emax, _ = SHAPES[name]
    if value < 0:
        return -exactly(-value, name)
    if value == 0:
        return 0.0
    exponent = value.numerator.bit_length() - value.denominator.bit_length()
    if value < Fraction(2) ** exponent:
        exponent -= 1
    spacing = Fraction(2) ** (max(exponent, 1 - emax) - precision + 1)
    units, rest = divmod(value, spacing)
    units += rest > spacing / 2 or (rest == spacing / 2 and units % 2 == 1)
    rounded = units * spacing
    return inf if rounded >= Fraction(2) ** (emax + 1) else float(rounded)
