"""What summing many values in a format does to their mean and variance: one after the other, and in NumPy's order.

A running sum S that is held in a format takes the next value X to S + ulp(S) round(X / ulp(S)), exactly, for as long as
it stays between two powers of two: S is a multiple of its own ulp. So over the values of a sample

    dS/dk = E[ulp(S) round(X / ulp(S))],

power of two by power of two, and each addition errs by the difference to X, whose mean makes the bias of the sum and
whose variance adds up to the rest of its error. While ulp(S) is well below the values that rest is all there is: on
positive values its root mean square is 0.2452 u sqrt(N) of the sum. Then the bias rules, until every value is lost.
Where values of both signs nearly cancel, S is taken to be as large as its root mean square.

NumPy's order (pairwise, in its `add.reduce` over contiguous values): runs of 8 to 16 values, and their sums in a tree.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal, NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.special import ndtri

from narrowgauge.arithmetic.formats import Format

__all__ = [
    "MOST",
    "SHARE",
    "Averaged",
    "Order",
    "SumError",
    "Terms",
    "averaged",
    "largest_count",
    "sum_error",
]

Doubles = npt.NDArray[np.float64]
Order = Literal["running", "pairwise"]

SHARE = 0.1  # of the standard error of a mean, what its summation may add
MOST = 2.0**53  # paths beyond which nobody asks
_PIECES = 1.6  # per cube root of the size: few, so that the density jumps little between two of them by chance
_FEWEST_PIECES = 8
_BLOCK, _SIDE_BY_SIDE = 128, 8  # values that NumPy adds up at most in one loop, and sums that grow there side by side
# Variance of the error of rounding none, one, two or more bits away, in ulp^2. One bit errs by half an ulp where it is
# 1: half of the time, were last bits 0 and 1 alike. But ties go to even, so that after many such sums a last bit is 1
# with p = (1 - q) / 2, and the sum of two of them with q = 2 p (1 - p), which is sqrt(2) - 1. Of two bits the odd ones
# err by a quarter, and half of the others by a half.
_ODD = math.sqrt(2.0) - 1.0
_TIES = np.array([0.0, _ODD / 4, _ODD / 16 + (1.0 - _ODD) / 8, 1.0 / 12])
_HALVES = ndtri((np.arange(8) + 0.5) / 8)
_HALVES /= _HALVES.std()


@dataclass(frozen=True, slots=True)
class SumError:
    """The error of a sum of `count` values: its mean, its variance, and whether the sum is past the format's range."""

    count: float
    bias: float
    variance: float
    overflows: bool


class _Sketch:
    """A distribution as atoms, the values that occur more than once, and uniform pieces between quantiles of the rest.

    The bias of rounding hangs on jumps of the density and on atoms. Of a sample itself it would mostly be chance: the
    mean of its rounding errors has a standard error of .29 ulp / sqrt(size), which in a long sum outgrows all else. The
    number of pieces grows with the cube root of the size, as that of a histogram should: "On optimal and data-based
    histograms", Biometrika 66(3), 1979, doi 10.1093/biomet/66.3.605 (recalled from memory).
    """

    def __init__(self, sample: Doubles) -> None:
        values, counts = np.unique(sample, return_counts=True)
        alone = counts == 1
        number = round(_PIECES * np.count_nonzero(alone) ** (1 / 3))
        if number < _FEWEST_PIECES:
            alone[:] = False
        self._atoms, self._weights = values[~alone], counts[~alone] / sample.size
        places = (1.0 - np.cos(np.pi * np.arange(number + 1) / max(number, 1))) / 2  # closer to each other in the tails
        rest = values[alone]
        self._ends = np.quantile(rest, places) if rest.size else np.zeros(0)
        self._shares = np.diff(places) * (rest.size / sample.size) if rest.size else np.zeros(0)
        middles = (self._ends[1:] + self._ends[:-1]) / 2
        self.mean = float((self._atoms * self._weights).sum() + (middles * self._shares).sum())

    def error(self, unit: float) -> float:
        """Return the mean of a value less the nearest multiple of `unit`.

        On a piece from a to b, at distances c and d from their multiples, it is (d^2 - c^2) / (2 (b - a)).
        """
        off = self._ends - unit * np.rint(self._ends / unit)
        wide = np.diff(self._ends)
        pieces = np.diff(off * off) / (2.0 * np.where(wide > 0, wide, np.inf))
        atoms = self._atoms - unit * np.rint(self._atoms / unit)
        return float((pieces * self._shares).sum() + (atoms * self._weights).sum())


class Terms:
    """A sample of the values to be summed, and what quantising them does, for every ulp asked for once.

    `mean` and `variance` are those of all values where more is known of them than the sample says.
    """

    def __init__(self, sample: Doubles, mean: float | None = None, variance: float | None = None) -> None:
        self._sample = np.asarray(sample, np.float64)
        self._sketch = _Sketch(self._sample)
        self._average, self._spread = float(self._sample.mean()), float(self._sample.var())
        self.mean = self._average if mean is None else mean
        self.variance = self._spread if variance is None else variance
        self._quantised: dict[int, tuple[float, float, float]] = {}

    def quantised(self, exponent: int) -> tuple[float, float, float]:
        """Return mean and variance of the values rounded to multiples of 2^exponent, and the variance of that error.

        The mean is the sketch's, moved by as much of the distance to the known mean as rounded values follow values.
        """
        known = self._quantised.get(exponent)
        if known is None:
            unit = 2.0**exponent
            rounded = unit * np.rint(self._sample / unit)
            follows = float((rounded * (self._sample - self._average)).mean()) / (self._spread or math.inf)
            mean = self._sketch.mean - self._sketch.error(unit) + follows * (self.mean - self._sketch.mean)
            grown = self.variance / self._spread if self._spread else 1.0
            known = mean, grown * float(rounded.var()), float((rounded - self._sample).var())
            self._quantised[exponent] = known
        return known


@dataclass(frozen=True, slots=True)
class _Piece:
    """A stretch of a running sum between two powers of two: from `done` values on, for `length` of them."""

    done: float
    length: float
    bias: float
    variance: float
    bias_rate: float
    variance_rate: float

    def at(self, count: float) -> SumError:
        more = count - self.done
        return SumError(count, self.bias + more * self.bias_rate, self.variance + more * self.variance_rate, False)


def _running(terms: Terms, form: Format) -> Iterator[_Piece]:
    """Yield the pieces of a running sum; the last one has no end, or ends where the sum is too large."""
    done, total, spread = 1.0, terms.mean, terms.variance
    bias, variance = 0.0, 0.0
    size = math.sqrt(total * total + spread)
    power = max(math.frexp(size)[1] - 1, form.emin) if size else form.emin
    while power <= form.emax:
        mean, scatter, error = terms.quantised(power - form.precision + 1)
        length = _until(2.0 ** (power + 1), total, spread, mean, scatter)
        yield _Piece(done, length, bias, variance, mean - terms.mean, error)
        if math.isinf(length):
            return
        done, power = done + length, power + 1
        total, spread = total + length * mean, spread + length * scatter
        bias, variance = bias + length * (mean - terms.mean), variance + length * error


def _until(limit: float, total: float, spread: float, mean: float, scatter: float) -> float:
    """Return after how many values the root mean square of a sum comes to a limit; infinite if it never does."""
    left = limit * limit - total * total - spread
    if left <= 0.0:
        return 0.0
    half = total * mean + scatter / 2
    inside = half * half + mean * mean * left
    if inside < 0.0 or half + math.sqrt(inside) <= 0.0:
        return math.inf
    return left / (half + math.sqrt(inside))


def sum_error(terms: Terms, count: float, form: Format, order: Order) -> SumError:
    """Return the error of the sum of so many values in a format."""
    return _running_error(terms, count, form) if order == "running" else _pairwise_error(terms, count, form)


def _running_error(terms: Terms, count: float, form: Format) -> SumError:
    for piece in _running(terms, form):
        if count <= piece.done + piece.length:
            return piece.at(max(count, piece.done))
    return SumError(count, 0.0, 0.0, True)


def _pairwise_error(terms: Terms, count: float, form: Format) -> SumError:
    """Add up what runs and the sums of the tree err by; halves are halved until a block has no more than 128 values."""
    if _power(terms, count) > form.emax:
        return SumError(count, 0.0, 0.0, True)
    halvings = max(0, math.ceil(math.log2(count / _BLOCK)))
    block = count / 2.0**halvings
    run = max(1.0, block / _SIDE_BY_SIDE)
    one = _running_error(terms, run, form)
    levels = round(math.log2(count / run)) if count > run else 0
    sizes = count / np.exp2(np.arange(levels, dtype=np.float64))
    added = float((count / sizes * _added(terms, sizes, form)).sum())
    return SumError(count, count / run * one.bias, count / run * one.variance + added, False)


def _added(terms: Terms, sizes: Doubles, form: Format) -> Doubles:
    """Return the variance of the rounding of sums of so many values, each of two halves, (sizes,).

    Which exponents sum and halves have is told on a grid of two normal halves, since beside a power of two it differs
    from sum to sum. The sum has as many bits too many as its exponent is above that of the finer half.
    """
    halves = sizes[:, None] / 2
    half = halves * terms.mean + np.sqrt(halves * terms.variance) * _HALVES
    whole = half[:, :, None] + half[:, None, :]
    finer = np.frexp(half)[1]
    power = np.maximum(np.frexp(whole)[1] - 1, form.emin)
    bits = power - np.maximum(np.minimum(finer[:, :, None], finer[:, None, :]) - 1, form.emin)
    spacing = np.ldexp(1.0, 2 * (power - form.precision + 1))
    found: Doubles = (spacing * _TIES[np.clip(bits, 0, len(_TIES) - 1)]).mean(axis=(1, 2))
    return found


def _power(terms: Terms, count: float) -> int:
    """Return the exponent of a sum of so many values, as its root mean square has it."""
    size = math.sqrt((count * terms.mean) ** 2 + count * terms.variance)
    return math.frexp(size)[1] - 1 if size else -(2**20)


class Averaged(NamedTuple):
    """What summation does to a mean and a variance, in the format and order of the sums.

    `bias` and `deviation` of the mean are in its unit, `share` is their root mean square over the standard error;
    `variance_bias` and `variance_deviation` are relative to the variance.
    """

    bias: float
    deviation: float
    share: float
    variance_bias: float
    variance_deviation: float


def averaged(terms: Terms, squares: Terms, count: int, form: Format, order: Order) -> Averaged | None:
    """Return what sums of `count` values and of their squares do; None where one of them is past the range.

    The variance is the mean of squares less the square of the mean. `terms` must vary.
    """
    own, square = (sum_error(one, float(count), form, order) for one in (terms, squares))
    if own.overflows or square.overflows:
        return None
    bias, deviation = own.bias / count, math.sqrt(own.variance) / count
    lever = 2.0 * terms.mean
    off = square.bias / count - lever * bias
    apart = math.hypot(math.sqrt(square.variance) / count, lever * deviation)
    return Averaged(
        bias=bias,
        deviation=deviation,
        share=_share(terms, own),
        variance_bias=off / terms.variance,
        variance_deviation=apart / terms.variance,
    )


def _share(terms: Terms, error: SumError) -> float:
    """Return the root mean square error of the mean over its standard error; infinite past the range."""
    if error.overflows:
        return math.inf
    return math.sqrt((error.bias * error.bias + error.variance) / (error.count * terms.variance))


def largest_count(terms: Terms, form: Format, order: Order, share: float = SHARE) -> int | None:
    """Return how many values may be summed before the error passes a share of the mean's standard error.

    None where 2^53 may. The smallest answer is 1: a value alone is not summed. `terms` must vary.
    """
    low, high = 0.0, math.log2(MOST)
    if _share(terms, sum_error(terms, MOST, form, order)) <= share:
        return None
    while high - low > 2.0**-7:
        middle = (low + high) / 2
        if _share(terms, sum_error(terms, 2.0**middle, form, order)) <= share:
            low = middle
        else:
            high = middle
    return int(2.0**low)
