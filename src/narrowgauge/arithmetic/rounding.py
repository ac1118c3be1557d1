"""Rounding carriers in place, and from float64, to nearest or in any mode; compiled where that is possible.

Two doors, because they rest on different theorems:

`round_carrier` finishes one operation that was computed in a float32 carrier, to nearest. For + - * / and the square
root of formats of 8 and 16 bits the two roundings are innocuous since 24 >= 2 x 11 + 2: "Innocuous Double Rounding of
Basic Arithmetic Operations", Journal of Formalized Reasoning 7(1), 2014, doi 10.6092/issn.1972-5787/4359, table I. For
TF32 that holds while results are normal; its smallest normal number is float32's, which has no bits to spare for
smaller results, so that products and quotients must come through the other door.

`narrow` takes float64 values of any origin straight to the format, so that they are rounded once: going
through float32 would turn 1 + 2^-11 + 2^-30 into 1.0 in binary16, where 1.0009765625 is right.

Subnormals are kept or flushed. Flushed: a result is rounded as if they were kept, and becomes a zero of its sign if it
is subnormal then, as processors do that look for tiny results after rounding. Constants and casts are flushed likewise,
so that no operand is ever subnormal, which is what processors that take subnormal operands for zeros see.
"""

from __future__ import annotations

import math
import struct
from collections.abc import Callable
from functools import cache, partial
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.formats import Format
from narrowgauge.arithmetic.scratch import filled32, words32, words64

__all__ = [
    "Doubles",
    "Floats",
    "Rounding",
    "carrier_rounding",
    "flush",
    "narrow",
    "narrow_integer",
    "narrow_number",
    "one_pass",
    "round_carrier",
    "round_half",
]

Rounding = Literal["nearest", "zero", "up", "down", "stochastic"]
Floats = npt.NDArray[np.floating[Any]]
Doubles = npt.NDArray[np.float64]

# Arrays without axes, which NumPy takes faster than scalars.
_SIGN32, _EXPONENT32, _ONE32 = (np.array(word, np.uint32) for word in (0x80000000, 0x7F800000, 1))
_EXPONENT64 = np.uint64(0x7FF0000000000000)
_SIGN64 = np.uint64(0x8000000000000000)
_IN_ONE_PASS = ("float16", "bfloat16")
_LOOPS = {"nearest": "nearest", "stochastic": "stochastic"}
_INTEGRAL: dict[str, Callable[[float], float]] = {
    "nearest": round,  # ties to even
    "zero": math.trunc,
    "up": math.ceil,
    "down": math.floor,
}


def round_carrier(values: Floats, form: Format) -> Floats:
    """Round a carrier array to nearest in `form`, in place, and return it; shape and strides are free.

    float32 array for the formats of 8 and 16 bits and TF32, each value the correctly rounded float32 result of one
    operation on values of the format. A native format is returned as it is.
    """
    return values if form.native or values.size == 0 else carrier_rounding(form)(values)


def carrier_rounding(form: Format) -> Callable[[Floats], Floats]:
    """Return what `round_carrier` does to an array with elements, chosen once; not for a native format."""
    rounding = one_pass(form, np.positive)
    if rounding is not None:
        return lambda values: rounding(values, out=values)
    wide = form.emax == 127  # the carrier has the same exponents: subnormals and overflow round like everything else
    loop = compiled.kernel("words" if wide else "singles")
    if loop is not None:
        return partial(_over_all, loop, np.dtype(np.uint32 if wide else np.float32), _figures32(form))
    return _rounding_of_words(form) if wide else partial(_round_singles, form)


def _over_all(loop: Callable[..., Any], kind: np.dtype[Any], figures: tuple[Any, ...], values: Floats) -> Floats:
    """Run a loop over all values in place, their memory taken as of a `kind`, and return them."""
    flat = _flat(values)
    loop(flat.view(kind), *figures)
    if flat.base is None:
        values[...] = flat.reshape(values.shape)
    return values


def one_pass(form: Format, ufunc: np.ufunc) -> Callable[..., Any] | None:
    """Return the ufunc that computes `ufunc` on carriers and rounds to nearest, None where nothing is compiled for it.

    `np.positive` is the rounding alone.
    """
    return compiled.kernel(f"{form.name} {ufunc.__name__}") if form.name in _IN_ONE_PASS else None


def flush(values: Floats, form: Format) -> Floats:
    """Replace what is subnormal in `form` by a zero of its sign, in place, and return the array."""
    loop = compiled.kernel("flush32" if values.dtype.itemsize == 4 else "flush64")
    least = values.dtype.type(form.min_normal)
    if loop is None:
        with np.errstate(invalid="ignore"):
            np.multiply(values, np.abs(values) >= least, out=values)
        return values
    return _over_all(loop, values.dtype, (least,), values)


def narrow(
    values: Doubles,
    form: Format,
    rounding: Rounding = "nearest",
    *,
    flushed: bool = False,
    uniforms: Doubles | None = None,
) -> Floats:
    """Return float64 `values` rounded once to `form`, as a new carrier array of the same shape.

    `uniforms` are numbers in [0, 1) of the same shape, for stochastic rounding: a magnitude between two values of the
    format goes to the larger one with the probability of its distance to the smaller, and beyond the largest finite
    value as if exponents went on. Toward zero and away from an infinity what is too large becomes the largest finite
    value; what is infinite stays so.
    """
    found: Floats
    if form.shift:  # by powers of two, which are exact; what float64 cannot hold is far outside the format
        scaled = np.multiply(values, 2.0**-form.shift)
        found = narrow(scaled, form.proper, rounding, flushed=flushed, uniforms=uniforms).astype(np.float64)
        return np.multiply(found, 2.0**form.shift, out=found)
    if form.precision == 53 or (form.native and rounding == "nearest"):
        with np.errstate(over="ignore", under="ignore", invalid="ignore"):  # invalid: a signalling NaN
            found = values.astype(form.storage)
    else:
        loop = compiled.kernel(_LOOPS.get(rounding, "directed")) if values.size else None
        if loop is not None:
            found = _narrow_compiled(loop, values, form, rounding, uniforms)
        elif rounding == "nearest":
            found = _narrow_to_nearest(values, form)
        else:
            found = _narrow_in_mode(values, form, rounding, uniforms)
    return flush(found, form) if flushed else found


def narrow_number(number: float, form: Format, rounding: Rounding = "nearest", *, flushed: bool = False) -> float:
    """Return a Python float rounded once to `form`, in every mode but the stochastic one."""
    if number == 0.0 or number != number or math.isinf(number):  # noqa: PLR0124  NaN
        return number if form.infinite or number == 0.0 else math.nan
    if form.precision == 53:
        rounded = number
    else:
        unit = math.ldexp(1.0, max(math.frexp(number)[1] - 1, form.emin) - form.precision + 1)
        rounded = math.copysign(_INTEGRAL[rounding](number / unit) * unit, number)
    if abs(rounded) > form.max_finite:
        above, below = _limits(form, rounding)
        rounded = math.copysign(above if number > 0 else below, number)
    return math.copysign(0.0, number) if flushed and abs(rounded) < form.min_normal else rounded


def narrow_integer(number: int, form: Format, rounding: Rounding = "nearest", *, flushed: bool = False) -> float:
    """Return a Python integer of any size rounded once to `form`, in every mode but the stochastic one.

    Wide integers are cut to 53 bits with their last bit made odd where something was cut off; a second
    rounding from there is harmless for precisions of 51 bits and less: "Emulation of a FMA and correctly
    rounded sums: proved algorithms using rounding to odd", IEEE Transactions on Computers 57(4), 2008,
    doi 10.1109/TC.2007.70819.
    """
    try:
        near = float(number)
    except OverflowError:
        near = math.inf if number > 0 else -math.inf
    if form.precision == 53:
        return _beside(near, number, rounding)
    size = abs(number)
    excess = size.bit_length() - 53
    if excess <= 0:
        return narrow_number(near, form, rounding, flushed=flushed)
    odd = (size >> excess) | int(size & ((1 << excess) - 1) != 0)
    try:
        exact = float(odd << excess)
    except OverflowError:  # finite all the same
        exact = 1.7976931348623157e308
    return narrow_number(-exact if number < 0 else exact, form, rounding, flushed=flushed)


def round_half(number: float) -> np.float32:
    """Return one number rounded to nearest in binary16, as a carrier: the hot path of 0-d values."""
    try:
        return np.float32(struct.unpack("e", struct.pack("e", number))[0])
    except OverflowError:
        return np.float32(math.copysign(math.inf, number))


def _beside(near: float, number: int, rounding: Rounding) -> float:
    """Return the float64 that a mode takes for an integer, given the nearest one."""
    if rounding == "nearest":
        return near
    over = math.isinf(near)
    rest = (-1 if near > 0 else 1) if over else (number > int(near)) - (number < int(near))
    target = {"up": math.inf, "down": -math.inf, "zero": 0.0}[rounding]
    wanted = -1 if target < near else 1  # the side on which the rounded number may lie
    return math.nextafter(near, target) if rest and rest == wanted else near


def _limits(form: Format, rounding: Rounding) -> tuple[float, float]:
    """Return the magnitudes that stand for too large a number above and below zero."""
    top, infinity = form.max_finite, form.infinity
    return {"zero": (top, top), "up": (infinity, top), "down": (top, infinity)}.get(rounding, (infinity, infinity))


def _flat(values: Floats) -> Floats:
    """Return all values along one axis, a view where memory has no gaps; else a copy in C order, of no base."""
    if values.flags.c_contiguous:
        return values.reshape(-1)
    flat = values.ravel("K")
    return flat if np.may_share_memory(flat, values) else values.flatten()


@cache
def _figures32(form: Format) -> tuple[Any, ...]:
    """Return the arguments of the loop over float32 that `form` needs."""
    if form.emax == 127:
        drop = 24 - form.precision
        return np.uint32(drop), np.uint32((1 << (drop - 1)) - 1), np.uint32(0x100000000 - (1 << drop))
    low, cap, unit = form.min_normal, 2.0 ** (form.emax + 1), 2.0 ** (1 - form.precision)
    return tuple(map(np.float32, (low, cap, unit * 2.0**23, form.max_finite, form.infinity)))


@cache
def _arrays32(form: Format) -> tuple[Any, ...]:
    """Return the same as arrays without axes, the factor of a power of two with 1.5 in it."""
    first, second, third, *_ = _figures32(form)
    return np.array(first), np.array(second), np.array(third if form.emax == 127 else np.float32(1.5) * third)


@cache
def _figures64(form: Format) -> tuple[float, ...]:
    """Return the figures of every loop over float64: least and greatest power of two, unit, top, infinity."""
    return form.min_normal, 2.0 ** (form.emax + 1), 2.0 ** (1 - form.precision), form.max_finite, form.infinity


def _rounding_of_words(form: Format) -> Callable[[Floats], Floats]:
    """Return what clears the last bits after adding half of their range, one less where the kept part is even.

    On a few thousand values finding names and arguments costs as much as the five passes: what can be is found here.
    """
    drop, half, mask = _arrays32(form)
    one, word = _ONE32, np.dtype(np.uint32)
    shift, keep, add = np.right_shift, np.bitwise_and, np.add

    def rounding(values: Floats) -> Floats:
        bits = values.view(word)
        work = words32("work", values.shape, values.size)
        shift(bits, drop, work)
        keep(work, one, work)
        add(work, half, work)
        add(bits, work, bits)
        keep(bits, mask, bits)
        return values

    return rounding


def _round_singles(form: Format, values: Floats) -> Floats:
    """Add and subtract a power of two whose last place is the spacing of the values: hardware rounds the sum.

    The power is 2^23 x 1.5 times the spacing, which follows from the exponent and from the smallest normal number.
    """
    low, cap, _, top, over = _figures32(form)
    bits = values.view(np.uint32)
    work = words32("work", values.shape, values.size)
    shift = work.view(np.float32)
    # Usually nothing is NaN or too large: the power then needs no upper limit. Positive numbers need no sign put back.
    least = np.minimum.reduce(values, None)
    usual = bool(np.maximum.reduce(values, None) <= top and least >= -top)
    signs = None if usual and least > 0 else words32("signs", values.shape, values.size)
    np.bitwise_and(bits, _EXPONENT32, out=work)
    if usual:
        np.maximum(shift, filled32(low, values.shape, values.size), out=shift)
    else:
        np.clip(shift, low, cap, out=shift)
    np.multiply(shift, _arrays32(form)[2], out=shift)
    if signs is not None:
        np.bitwise_and(bits, _SIGN32, out=signs)
    np.add(values, shift, out=values)
    np.subtract(values, shift, out=values)
    if signs is not None:
        np.bitwise_or(bits, signs, out=bits)
    if not usual:
        np.copyto(values, np.copysign(over, values), where=np.abs(values) > top)
    return values


def _narrow_compiled(
    loop: Callable[..., Any], values: Doubles, form: Format, rounding: Rounding, uniforms: Doubles | None
) -> Floats:
    """Run a loop over float64; without random numbers the result lies in memory as the argument does."""
    figures = _figures64(form)
    if rounding == "stochastic":
        found: Floats = np.empty(values.shape, np.float32)
        drawn = np.ascontiguousarray(uniforms).reshape(-1)
        loop(np.ascontiguousarray(values).reshape(-1), found.reshape(-1), *figures, drawn)
        return found
    if not values.flags.forc:
        values = values.copy("C")
    found = np.empty_like(values, np.float32)
    if rounding != "nearest":
        figures = (*figures, *_limits(form, rounding), float(rounding == "up"), float(rounding == "down"))
    loop(values.ravel("K"), found.ravel("K"), *figures)
    return found


def _narrow_to_nearest(values: Doubles, form: Format) -> Floats:
    """Round to nearest through float32, whose last place is made odd where the format could take it for a midpoint.

    A midpoint of the format has a float32 significand that ends in zeros; there alone the second rounding could err.
    """
    with np.errstate(over="ignore", under="ignore", invalid="ignore"):
        single = values.astype(np.float32)
    single[np.isnan(single)] = np.nan  # of one payload: all ones would round to a zero
    bits = single.view(np.uint32)
    tail = bits & np.uint32((1 << (23 - form.precision)) - 1)
    if not tail.all():
        places = np.nonzero(np.atleast_1d(tail) == 0)
        near = np.atleast_1d(single)[places].astype(np.float64)
        given = np.atleast_1d(values)[places]
        apart = (near < given) | (near > given)  # neither for NaN
        if apart.any():
            chosen = tuple(axis[apart] for axis in places)
            step = np.where(np.abs(given[apart]) > np.abs(near[apart]), 1, -1).astype(np.int32)
            np.atleast_1d(bits)[chosen] += step.view(np.uint32)
    return round_carrier(single, form)


def _narrow_in_mode(values: Doubles, form: Format, rounding: Rounding, uniforms: Doubles | None) -> Floats:
    """Round toward zero on the grid of the value's exponent, then one spacing away from zero where the mode asks."""
    low, cap, unit, top, infinity = _figures64(form)
    places = ("size", "spacing", "shift", "rounded")
    size, spacing, shift, rounded = (words64(place, values.shape, values.size).view(np.float64) for place in places)
    with np.errstate(all="ignore"):
        np.abs(values, out=size)
        np.bitwise_and(size.view(np.uint64), _EXPONENT64, out=spacing.view(np.uint64))
        np.clip(spacing, low, cap, out=spacing)
        np.multiply(spacing, unit, out=spacing)
        np.multiply(spacing, 2.0**52, out=shift)
        np.add(size, shift, out=rounded)
        np.subtract(rounded, shift, out=rounded)
        np.multiply(spacing, rounded > size, out=shift)
        np.subtract(rounded, shift, out=rounded)
        if rounding == "stochastic":
            assert uniforms is not None
            np.multiply(uniforms, spacing, out=shift)
            np.subtract(size, rounded, out=size)  # exact
            np.multiply(spacing, shift < size, out=shift)
            np.add(rounded, shift, out=rounded)
        elif rounding != "zero":
            away = np.asarray(rounded < size)
            away &= np.signbit(values) == (rounding == "down")
            np.multiply(spacing, away, out=shift)
            np.add(rounded, shift, out=rounded)
        if not (rounded.size == 0 or rounded.max() <= top):  # also true of NaN
            above, below = _limits(form, rounding)
            over = np.where(np.isinf(values), infinity, np.where(np.signbit(values), below, above))
            np.copyto(rounded, over, where=rounded > top)
            np.copyto(rounded, np.nan, where=np.isnan(values))
        signs = np.bitwise_and(values.view(np.uint64), _SIGN64, out=shift.view(np.uint64))
        bits = rounded.view(np.uint64)
        np.bitwise_and(bits, ~_SIGN64, out=bits)
        np.bitwise_or(bits, signs, out=bits)
        return rounded.astype(np.float32)
