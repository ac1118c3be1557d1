"""Rounding to nearest, ties to even, with subnormals kept: in place on carriers, and from float64.

Two doors, because they rest on different theorems:

`round_carrier` finishes one operation that was computed in a float32 carrier. For + - * / and the square root
of 16-bit formats the two roundings are innocuous since 24 >= 2 x 11 + 2: "Innocuous Double Rounding of Basic
Arithmetic Operations", Journal of Formalized Reasoning 7(1), 2014, doi 10.6092/issn.1972-5787/4359, table I.

`narrow` takes float64 values of any origin straight to the format, so that they are rounded once: going
through float32 would turn 1 + 2^-11 + 2^-30 into 1.0 in binary16, where 1.0009765625 is right.
"""

from __future__ import annotations

import threading
from typing import Any

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import Format

__all__ = ["narrow", "narrow_integer", "narrow_number", "round_carrier"]

Floats = npt.NDArray[np.floating[Any]]
Doubles = npt.NDArray[np.float64]


class _Scratch(threading.local):
    """Integer work space of each thread, kept between operations: one allocation, not one per rounding."""

    words: npt.NDArray[np.uint32] = np.empty(0, np.uint32)

    def like(self, shape: tuple[int, ...], size: int) -> npt.NDArray[np.uint32]:
        if self.words.size < size:
            self.words = np.empty(max(size, 4096), np.uint32)
        return self.words[:size].reshape(shape)


_SCRATCH = _Scratch()

_MAGNITUDE32 = np.uint32(0x7FFFFFFF)
_MAGNITUDE64 = np.uint64(0x7FFFFFFFFFFFFFFF)


def round_carrier(values: Floats, form: Format) -> Floats:
    """Round a carrier array to `form` in place and return it; shape and strides are free.

    float32 array for the 16-bit formats, each value the correctly rounded float32 result of one operation on
    values of the format. A native format is returned as it is.
    """
    if form.native or values.size == 0:
        return values
    if values.ndim == 0:
        round_carrier(values.reshape(1), form)  # a view; np.nonzero takes no 0-d arrays
        return values
    bits = values.view(np.uint32)
    work = _SCRATCH.like(values.shape, values.size)
    if form.emax == 127:
        # The carrier has the same exponents: subnormals and overflow round like everything else.
        _to_nearest_even(bits, work, drop=24 - form.precision)
        return values
    small = _subnormals(bits, work, form)
    saved = None if small is None else values[small]
    _to_nearest_even(bits, work, drop=24 - form.precision)
    if small is not None and saved is not None:
        values[small] = _on_grid(saved, form.min_subnormal, 23)
    if not (values.max() <= form.max_finite and values.min() >= -form.max_finite):  # also true of NaN
        _overflow(values, form)
    return values


def narrow(values: Doubles, form: Format) -> Floats:
    """Return float64 `values` rounded once to `form`, as a new carrier array of the same shape."""
    if form.native:
        with np.errstate(over="ignore", under="ignore", invalid="ignore"):  # invalid: a signalling NaN
            return values.astype(form.storage)
    rounded = np.array(values, dtype=np.float64, order="K")  # always a copy
    if rounded.size == 0:
        return rounded.astype(form.carrier)
    flat = rounded.reshape(-1) if rounded.ndim == 0 else rounded
    bits = flat.view(np.uint64)
    magnitude = bits & _MAGNITUDE64
    # Zero wraps to the largest integer and so never counts as small.
    least = np.uint64(np.float64(form.min_normal).view(np.uint64)) - np.uint64(1)
    magnitude -= np.uint64(1)
    small = np.nonzero(magnitude < least) if magnitude.min() < least else None
    saved = None if small is None else flat[small]
    magnitude = bits >> np.uint64(53 - form.precision)
    magnitude &= np.uint64(1)
    magnitude += np.uint64((1 << (52 - form.precision)) - 1)
    bits += magnitude
    bits &= ~np.uint64((1 << (53 - form.precision)) - 1)
    if small is not None and saved is not None:
        flat[small] = _on_grid(saved, form.min_subnormal, 52)
    # Asked of the values before rounding, which turns the NaN of all ones into a zero. Also true of NaN.
    overflowing = form.max_finite + 2.0 ** (form.emax - form.precision)
    if not (values.max() < overflowing and values.min() > -overflowing):
        flat[np.isnan(values.reshape(flat.shape))] = np.nan  # one NaN, whatever payload came in
        _overflow(flat, form)
    with np.errstate(under="ignore"):  # exact: every value of the format is one of the carrier
        return rounded.astype(form.carrier)


def narrow_number(number: float, form: Format) -> float:
    """Return a Python float rounded once to `form`."""
    if form.name == "float64" or number == 0.0:  # a zero keeps its sign
        return float(number)
    return float(narrow(np.array([number], np.float64), form)[0])


def narrow_integer(number: int, form: Format) -> float:
    """Return a Python integer of any size rounded once to `form`; infinite beyond its range.

    Wide integers are cut to 53 bits with their last bit made odd where something was cut off; a second
    rounding from there is harmless for precisions of 51 bits and less: "Emulation of a FMA and correctly
    rounded sums: proved algorithms using rounding to odd", IEEE Transactions on Computers 57(4), 2008,
    doi 10.1109/TC.2007.70819.
    """
    size = abs(number)
    excess = size.bit_length() - 53
    try:
        if excess <= 0 or form.name == "float64":
            return narrow_number(float(number), form)
        odd = (size >> excess) | int(size & ((1 << excess) - 1) != 0)
        exact = float(odd << excess)
    except OverflowError:
        exact = float("inf")
    return narrow_number(-exact if number < 0 else exact, form)


def _to_nearest_even(bits: npt.NDArray[np.uint32], work: npt.NDArray[np.uint32], drop: int) -> None:
    """Clear the last `drop` bits after adding half of their range, one less where the kept part is even."""
    np.right_shift(bits, np.uint32(drop), out=work)
    np.bitwise_and(work, np.uint32(1), out=work)
    np.add(work, np.uint32((1 << (drop - 1)) - 1), out=work)
    np.add(bits, work, out=bits)
    np.bitwise_and(bits, np.uint32(0xFFFFFFFF ^ ((1 << drop) - 1)), out=bits)


def _subnormals(
    bits: npt.NDArray[np.uint32], work: npt.NDArray[np.uint32], form: Format
) -> tuple[npt.NDArray[np.intp], ...] | None:
    """Return where nonzero magnitudes lie below the smallest normal number, or None where none does."""
    np.bitwise_and(bits, _MAGNITUDE32, out=work)
    np.subtract(work, np.uint32(1), out=work)  # zero wraps around to the largest integer
    least = np.uint32(np.float32(form.min_normal).view(np.uint32)) - np.uint32(1)
    return np.nonzero(work < least) if work.min() < least else None


def _on_grid(values: Floats, spacing: float, fraction_bits: int) -> Floats:
    """Round to multiples of `spacing`, ties to even: a sum whose last place is `spacing` does it in hardware.

    `fraction_bits` are those of the array's own type; magnitudes are below 2^fraction_bits x spacing.
    """
    shift = values.dtype.type(spacing * 2.0**fraction_bits)
    return np.copysign((np.abs(values) + shift) - shift, values)


def _overflow(values: Floats, form: Format) -> None:
    """Turn what rounded beyond the largest finite value into infinities, in place."""
    np.copyto(values, np.copysign(values.dtype.type(np.inf), values), where=np.abs(values) > form.max_finite)
