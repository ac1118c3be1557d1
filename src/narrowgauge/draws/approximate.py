"""Approximate normal draws: cheap maps from uniforms in (0, 1), each the least-squares fit of its kind to the quantile.

| kind       | the map                                                                                               |
|------------|-------------------------------------------------------------------------------------------------------|
| constant   | on each of N = 2^d equal cells the mean of the normal there: its index is the uniform's first d bits  |
| linear     | a line on each dyadic interval [2^-(k+1), 2^-k) of the distance to the nearer end: its index is the   |
|            | exponent of that distance; the last interval reaches to the end                                       |
| polynomial | one polynomial of an odd degree on the whole of (0, 1)                                                |

Every map is odd about 1/2, so that its draws have mean 0 exactly. As the least-squares fit from a space that holds the
map itself, it has E[Z~^2] = 1 - mean square error. That such maps may replace the normals of a path, if a correction
level makes up for them: "Approximating inverse cumulative distribution functions to produce approximate random
variables", ACM Trans. Math. Software 49(3), 2023, doi 10.1145/3604935 (recalled from memory). The integrals of the
normal density in closed form are textbook calculus (integration by parts).

Tables are made once, in float64. A draw is computed in float64 and rounded once in each arm, as an exact one is.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from numpy.polynomial import legendre

from narrowgauge.draws.normals import exact_normals, normal_cdf

__all__ = ["Approximation", "Constant", "Linear", "Polynomial"]

Doubles = npt.NDArray[np.float64]
Approximation = Callable[[Doubles], Doubles]  # uniforms in (0, 1) to approximate normals, a new array of their shape

_FURTHEST = 12.0  # normals beyond it have a probability below 1e-32, which no sum here can feel
_NODES = 6001  # of the trapezoidal rule, whose error for such integrands falls faster than any power of their distance


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Constant:
    """Piecewise constant: `values` are the means of the normal on equal cells, (cells,)."""

    values: Doubles
    mean_square_error: float

    @classmethod
    def of(cls, cells: int) -> Constant:
        """Return the map on `cells` equal cells, a power of two."""
        half = cells // 2
        lower = _means(np.arange(half + 1) / cells)
        values = np.concatenate([lower, -lower[::-1]])
        return cls(values=values, mean_square_error=1.0 - math.fsum(values * values) / cells)

    def __call__(self, uniforms: Doubles) -> Doubles:
        """Return the approximate normals of uniforms in (0, 1), a new float64 array of the same shape."""
        return np.asarray(self.values[(uniforms * self.values.size).astype(np.int32)])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Linear:
    """Piecewise linear: intercept + slope x distance to the nearer end, (intervals,) each, from 1/2 outwards."""

    intercepts: Doubles
    slopes: Doubles
    mean_square_error: float

    @classmethod
    def of(cls, intervals: int) -> Linear:
        """Return the map with `intervals` of them on either side of 1/2."""
        high: Doubles = np.ldexp(1.0, -np.arange(1, intervals + 1))
        low = np.append(high[1:], 0.0)
        width = high - low
        z, first = _first(low, high)
        # Means over each interval of z^2 and z u, from their integrals in closed form.
        second = 1.0 - (_times_density(z[1]) - _times_density(z[0])) / width
        mixed = _square_density(z[1]) - _square_density(z[0])
        mixed -= high * _density(z[1]) - low * _density(z[0])
        middle, spread = (low + high) / 2, width * width / 12
        slopes = (mixed / width - first * middle) / spread
        errors = second - first * first - slopes * slopes * spread
        return cls(intercepts=first - slopes * middle, slopes=slopes, mean_square_error=2.0 * math.fsum(width * errors))

    def __call__(self, uniforms: Doubles) -> Doubles:
        """Return the approximate normals of uniforms in (0, 1), a new float64 array of the same shape."""
        upper = uniforms > 0.5
        ends = np.where(upper, 1.0 - uniforms, uniforms)  # exact
        places = np.clip(-np.frexp(ends)[1] - 1, 0, self.slopes.size - 1)
        ends *= self.slopes[places]
        ends += self.intercepts[places]
        return np.negative(ends, out=ends, where=upper)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Polynomial:
    """One polynomial: `series` are its coefficients of Legendre polynomials in 2 u - 1, (degree + 1,)."""

    series: Doubles
    mean_square_error: float

    @classmethod
    def of(cls, degree: int) -> Polynomial:
        """Return the map of the degree given; an even one has no term of its own and gives that of one less."""
        z, step = np.linspace(-_FURTHEST, _FURTHEST, _NODES, retstep=True)
        # On the scale of the normal the integrand is smooth: int Phi^-1(u) P_k(2 u - 1) du = E[Z P_k(2 Phi(Z) - 1)].
        weights = step * z * _density(z)
        series = np.zeros(degree + 1)
        for k in range(1, degree + 1, 2):
            series[k] = (2 * k + 1) * math.fsum(weights * legendre.legval(2.0 * normal_cdf(z) - 1.0, np.eye(k + 1)[k]))
        explained = math.fsum(series**2 / (2.0 * np.arange(degree + 1) + 1.0))
        return cls(series=series, mean_square_error=1.0 - explained)

    def __call__(self, uniforms: Doubles) -> Doubles:
        """Return the approximate normals of uniforms in (0, 1), a new float64 array of the same shape."""
        return np.asarray(legendre.legval(2.0 * uniforms - 1.0, self.series))


def _means(ends: Doubles) -> Doubles:
    """Return the mean of the normal between neighbouring uniforms of a rising array that begins at 0."""
    return _first(ends[:-1], ends[1:])[1]


def _first(low: Doubles, high: Doubles) -> tuple[tuple[Doubles, Doubles], Doubles]:
    """Return the normals at both ends of intervals of uniforms, and the mean of the normal on each.

    That is (phi(a) - phi(b)) / (Phi(b) - Phi(a)).
    """
    a, b = exact_normals(low), exact_normals(high)
    return (a, b), (_density(a) - _density(b)) / (high - low)


def _density(z: Doubles) -> Doubles:
    return np.asarray(np.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi))


def _times_density(z: Doubles) -> Doubles:
    """Return z phi(z), 0 at infinity."""
    return np.where(np.isinf(z), 0.0, z) * _density(z)


def _square_density(z: Doubles) -> Doubles:
    """Return the integral of phi^2 up to z: Phi(sqrt(2) z) / (2 sqrt(pi))."""
    return normal_cdf(math.sqrt(2.0) * z) / (2.0 * math.sqrt(math.pi))
