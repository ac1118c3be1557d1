"""Loops for numba: one pass over words, no branch in it, the operations of the NumPy code beside them one by one.

Nothing here is called as it stands: `compiled.py` compiles it, and only there numba is imported. A loop that has a
branch, or a division by what might be zero, is not vectorised and costs ten times as much.
"""

# ruff: noqa: PLR0917  numba calls by position
# ruff: noqa: PLR0124  NaN

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["LOOPS"]

Singles = npt.NDArray[np.float32]
Doubles = npt.NDArray[np.float64]
Number = Any  # a float64, or a Python float
Words = npt.NDArray[np.uint32]

_SIGN32, _SIZE32, _EXPONENT32 = np.uint32(0x80000000), np.uint32(0x7FFFFFFF), np.uint32(0x7F800000)
_SIGN64, _SIZE64 = np.uint64(0x8000000000000000), np.uint64(0x7FFFFFFFFFFFFFFF)
_EXPONENT64 = np.uint64(0x7FF0000000000000)


def words(bits: Words, drop: np.uint32, half: np.uint32, mask: np.uint32) -> None:
    """Round float32 words to nearest by dropping bits, in place: formats with float32's exponents."""
    for i in range(bits.size):
        word = bits[i]
        bits[i] = (word + ((word >> drop) & np.uint32(1)) + half) & mask


def singles(
    values: Singles, low: np.float32, cap: np.float32, factor: np.float32, top: np.float32, over: np.float32
) -> None:
    """Round float32 to nearest in place: formats with a smaller range of exponents."""
    for i in range(values.size):
        word = np.float32(values[i]).view(np.uint32)
        power = np.uint32(word & _EXPONENT32).view(np.float32)
        power = low if power < low else power
        power = cap if power > cap else power
        shift = power * factor
        size = (np.uint32(word & _SIZE32).view(np.float32) + shift) - shift
        size = over if size > top else size
        values[i] = np.uint32((np.float32(size).view(np.uint32) & _SIZE32) | (word & _SIGN32)).view(np.float32)


def flush32(values: Singles, least: np.float32) -> None:
    """Replace magnitudes below `least` by a zero of their sign, in place."""
    for i in range(values.size):
        word = np.float32(values[i]).view(np.uint32)
        size = np.uint32(word & _SIZE32).view(np.float32)
        values[i] = np.uint32(word & _SIGN32 if size < least else word).view(np.float32)


def flush64(values: Doubles, least: np.float64) -> None:
    """Do the same for float64."""
    for i in range(values.size):
        word = np.float64(values[i]).view(np.uint64)
        size = np.uint64(word & _SIZE64).view(np.float64)
        values[i] = np.uint64(word & _SIGN64 if size < least else word).view(np.float64)


def nearest(
    values: Doubles, found: Singles, low: Number, cap: Number, unit: Number, top: Number, infinity: Number
) -> None:
    """Round float64 to nearest, into float32."""
    for i in range(values.size):
        word = np.float64(values[i]).view(np.uint64)
        power = np.uint64(word & _EXPONENT64).view(np.float64)
        power = low if power < low else power
        power = cap if power > cap else power
        shift = power * unit * 4503599627370496.0
        given = np.uint64(word & _SIZE64).view(np.float64)
        size = (given + shift) - shift
        size = infinity if size > top else size
        size = np.nan if given != given else size  # of one payload, which no later rounding carries over
        found[i] = np.uint64((np.float64(size).view(np.uint64) & _SIZE64) | (word & _SIGN64)).view(np.float64)


def directed(
    values: Doubles, found: Singles, low: Number, cap: Number, unit: Number, top: Number, infinity: Number,
    above: Number, below: Number, up: Number, down: Number,
) -> None:  # fmt: skip
    """Round float64 toward zero, then away from it where `up` (positive) or `down` (negative) is 1, into float32.

    `above` and `below` are the magnitudes that stand for too large a number.
    """
    for i in range(values.size):
        word = np.float64(values[i]).view(np.uint64)
        power = np.uint64(word & _EXPONENT64).view(np.float64)
        power = low if power < low else power
        power = cap if power > cap else power
        spacing = power * unit
        shift = spacing * 4503599627370496.0
        given = np.uint64(word & _SIZE64).view(np.float64)
        size = (given + shift) - shift
        size = size - spacing if size > given else size
        away = up if (word & _SIGN64) == 0 else down
        size = size + spacing * away if size < given else size
        limit = above if (word & _SIGN64) == 0 else below
        limit = infinity if given > 1.7976931348623157e308 else limit
        size = limit if size > top else size
        size = np.nan if given != given else size
        found[i] = np.uint64((np.float64(size).view(np.uint64) & _SIZE64) | (word & _SIGN64)).view(np.float64)


def stochastic(
    values: Doubles,
    found: Singles,
    low: Number,
    cap: Number,
    unit: Number,
    top: Number,
    infinity: Number,
    uniforms: Doubles,
) -> None:
    """Round float64 away from zero with the probability of its distance to the value below, into float32."""
    for i in range(values.size):
        word = np.float64(values[i]).view(np.uint64)
        power = np.uint64(word & _EXPONENT64).view(np.float64)
        power = low if power < low else power
        power = cap if power > cap else power
        spacing = power * unit
        shift = spacing * 4503599627370496.0
        given = np.uint64(word & _SIZE64).view(np.float64)
        size = (given + shift) - shift
        size = size - spacing if size > given else size
        size = size + spacing if uniforms[i] * spacing < given - size else size
        size = infinity if size > top else size
        size = np.nan if given != given else size
        found[i] = np.uint64((np.float64(size).view(np.uint64) & _SIZE64) | (word & _SIGN64)).view(np.float64)


def look_up(values: Words, entries: Singles, found: Singles) -> None:
    """Take the entry of each value's 16 leading bits: formats that lie inside bfloat16."""
    for i in range(values.size):
        found[i] = entries[values[i] >> np.uint32(16)]


def look_up_half(values: Singles, entries: Singles, found: Singles) -> None:
    """Take the entry of each value's binary16 pattern."""
    for i in range(values.size):
        word = np.float32(np.float32(values[i]) * np.float32(2.0**-112)).view(np.uint32)
        found[i] = entries[
            ((word >> np.uint32(13)) & np.uint32(0x7FFF)) | ((word >> np.uint32(16)) & np.uint32(0x8000))
        ]


def uniforms(found: Doubles, start: np.uint64) -> None:
    """Fill with the numbers of `stochastic.py`."""
    for i in range(found.size):
        word = start + np.uint64(i + 1) * np.uint64(0x9E3779B97F4A7C15)
        word = (word ^ (word >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
        word = (word ^ (word >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
        word = word ^ (word >> np.uint64(31))
        found[i] = np.float64(np.int64(word >> np.uint64(11))) * 1.1102230246251565e-16


def odd(total: Any, left: Any, right: Any) -> Any:
    """Make a rounded sum odd where it is not exact: an elementwise function, all of its branches selections."""
    part = total - left
    rest = (left - (total - part)) + (right - part)
    word = np.float64(total).view(np.uint64)
    one = np.uint64(1)
    outward = (rest > 0.0) == (total > 0.0)
    moved = word + one if outward else word - one
    moved = moved if (word & one) == 0 else word
    return np.uint64(moved if (rest > 0.0) | (rest < 0.0) else word).view(np.float64)


def rest_add(x: Doubles, y: Doubles, found: Doubles, rest: Doubles) -> bool:
    """Add in float64, with the error term; false if a number is so large or small that this may not be exact."""
    moderate = True
    for i in range(found.size):
        left, right = x[i], y[i]
        one, other = abs(left), abs(right)
        total = left + right
        part = total - left
        found[i] = total
        rest[i] = (left - (total - part)) + (right - part)
        moderate &= (one < 2.0**400) & (other < 2.0**400)
    return moderate


def rest_multiply(x: Doubles, y: Doubles, found: Doubles, rest: Doubles) -> bool:
    """Multiply likewise: Dekker's error term of a product."""
    moderate = True
    for i in range(found.size):
        left, right = x[i], y[i]
        one, other = abs(left), abs(right)
        wide, far = left * 134217729.0, right * 134217729.0
        a, c = wide - (wide - left), far - (far - right)
        b, d = left - a, right - c
        product = left * right
        found[i] = product
        rest[i] = ((a * c - product) + a * d + b * c) + b * d
        moderate &= (one < 2.0**400) & (other < 2.0**400)
        moderate &= ((one > 2.0**-400) | (one == 0.0)) & ((other > 2.0**-400) | (other == 0.0))
    return moderate


def rest_divide(x: Doubles, y: Doubles, found: Doubles, rest: Doubles) -> bool:
    """Divide likewise: the remainder over the divisor."""
    moderate = True
    for i in range(found.size):
        above, below = x[i], y[i]
        one, other = abs(above), abs(below)
        quotient = above / below
        wide, far = quotient * 134217729.0, below * 134217729.0
        a, c = wide - (wide - quotient), far - (far - below)
        b, d = quotient - a, below - c
        product = quotient * below
        lost = ((a * c - product) + a * d + b * c) + b * d
        found[i] = quotient
        rest[i] = ((above - product) - lost) / below
        moderate &= (one < 2.0**400) & (other < 2.0**400)
        moderate &= ((one > 2.0**-400) | (one == 0.0)) & (other > 2.0**-400)
    return moderate


def rest_sqrt(x: Doubles, found: Doubles, rest: Doubles) -> bool:
    """Take the square root likewise: the remainder over twice the root."""
    moderate = True
    for i in range(found.size):
        square = x[i]
        root = np.sqrt(square)
        wide = root * 134217729.0
        a = wide - (wide - root)
        b = root - a
        product = root * root
        lost = ((a * a - product) + a * b + b * a) + b * b
        found[i] = root
        rest[i] = ((square - product) - lost) / (2.0 * root)
        moderate &= (square < 2.0**400) & ((square > 2.0**-400) | (square == 0.0))
    return moderate


def moved(found: Doubles, rest: Doubles, up: np.int64, down: np.int64, inward: np.int64) -> None:
    """Move each float64 to its neighbour where the rest lies on a side that the mode asks for (flags of 0 and 1)."""
    for i in range(found.size):
        more, less = rest[i] > 0.0, rest[i] < 0.0
        outward = more == (found[i] > 0.0)
        wanted = (up if more else np.int64(0)) + (down if less else np.int64(0))
        wanted += np.int64(0) if outward | (more == less) else inward
        word = np.float64(found[i]).view(np.int64)
        found[i] = np.int64(word + wanted if outward else word - wanted).view(np.float64)


def moved_at_random(found: Doubles, rest: Doubles, uniforms: Doubles) -> None:
    """Take the larger neighbour of an exact result with the probability of its distance to the smaller one."""
    for i in range(found.size):
        more, less = rest[i] > 0.0, rest[i] < 0.0
        outward = more == (found[i] > 0.0)
        word = np.float64(found[i]).view(np.int64)
        spacing = np.int64(word & np.int64(0x7FF0000000000000)).view(np.float64) * 2.0**-52
        first = (word & np.int64(0xFFFFFFFFFFFFF)) == 0  # of its binade: the next smaller one is half as far
        spacing = spacing * 0.5 if first & (not outward) else spacing
        place = abs(rest[i]) / spacing
        beyond = uniforms[i] < place if outward else uniforms[i] >= 1.0 - place
        step = np.int64(1) if beyond & (more | less) else np.int64(0)
        found[i] = np.int64(word + step if outward else word - step).view(np.float64)


# Arrays that are only read may be read-only.
_READ = "Array({}, 1, 'C', readonly=True)"
_NARROW = f"void({_READ.format('float64')}, float32[::1], float64, float64, float64, float64, float64"
_REST = f"boolean({_READ.format('float64')}, {_READ.format('float64')}, float64[::1], float64[::1])"

# The signature of each loop; of `odd`, which becomes a ufunc, that of one element.
LOOPS: dict[str, tuple[Any, str]] = {
    "words": (words, "void(uint32[::1], uint32, uint32, uint32)"),
    "singles": (singles, "void(float32[::1], float32, float32, float32, float32, float32)"),
    "flush32": (flush32, "void(float32[::1], float32)"),
    "flush64": (flush64, "void(float64[::1], float64)"),
    "nearest": (nearest, _NARROW + ")"),
    "directed": (directed, _NARROW + ", float64, float64, float64, float64)"),
    "stochastic": (stochastic, _NARROW + f", {_READ.format('float64')})"),
    "look_up": (look_up, f"void({_READ.format('uint32')}, {_READ.format('float32')}, float32[::1])"),
    "look_up_half": (look_up_half, f"void({_READ.format('float32')}, {_READ.format('float32')}, float32[::1])"),
    "rest_add": (rest_add, _REST),
    "rest_multiply": (rest_multiply, _REST),
    "rest_divide": (rest_divide, _REST),
    "rest_sqrt": (rest_sqrt, f"boolean({_READ.format('float64')}, float64[::1], float64[::1])"),
    "moved": (moved, "void(float64[::1], float64[::1], int64, int64, int64)"),
    "moved_at_random": (moved_at_random, f"void(float64[::1], float64[::1], {_READ.format('float64')})"),
    "uniforms": (uniforms, "void(float64[::1], uint64)"),
    "odd": (odd, "float64(float64, float64, float64)"),
}
