"""Draws of every other distribution, by inversion of the uniforms: a row for each.

A row is the quantile function of the standard form (location 0, scale 1): (uniforms, *parameters) -> float64, or int64
where the draws are whole numbers. Uniforms lie in (0, 1); parameters are floats, or float64 arrays that broadcast.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import special

from narrowgauge.draws.normals import exact_normals

__all__ = ["ADDITIVE", "QUANTILES", "inverted"]

Doubles = npt.NDArray[np.float64]
Quantile = Callable[..., Any]

_MOST_ROWS = 2**16  # of a table of cumulated probabilities
# Distributions whose independent draws add up to one with the sum of the (single) parameters.
ADDITIVE = frozenset({"gamma", "poisson"})


def _exponential(u: Doubles) -> Doubles:
    return -np.log1p(-u)


def _laplace(u: Doubles) -> Doubles:
    # The lower half from u, the upper from 1 - u, each of which is exact: no tail is lost.
    return np.where(u < 0.5, np.log(2 * u), -np.log(2 * (1 - u)))


def _cauchy(u: Doubles) -> Doubles:
    tail = np.minimum(u, 1 - u)  # exact; the tangent of pi / 2 - x would lose the tail
    return np.where(tail > 0.25, np.tan(np.pi * (u - 0.5)), np.copysign(1 / np.tan(np.pi * tail), u - 0.5))


def _counted(u: Doubles, cdf: Callable[[Any], Any], guess: Callable[[], Any]) -> npt.NDArray[np.int64]:
    """Return the smallest k with cdf(k) >= u: `guess` inverts a continuous cdf, whose rounding may be off by one."""
    k = np.maximum(np.ceil(guess()), 0.0)
    k = np.where((k > 0) & (cdf(np.maximum(k - 1, 0.0)) >= u), k - 1, k)
    k = np.where(cdf(k) < u, k + 1, k)
    return _whole(k)


def _whole(k: Doubles) -> npt.NDArray[np.int64]:
    if not np.isfinite(k).all():
        raise ValueError("no whole number has these parameters")
    return k.astype(np.int64)


def _poisson(u: Doubles, mean: Any) -> npt.NDArray[np.int64]:
    if np.any(~(np.asarray(mean) >= 0)):
        raise ValueError("lam < 0 or lam is NaN")
    # By Chernoff's bound the count stays below the last row with probability above 1 - 2^-60.
    rows = int(np.max(mean, initial=0.0) + 10 * math.sqrt(np.max(mean, initial=0.0))) + 64
    if np.ndim(mean) == 0 and rows <= _MOST_ROWS:
        return np.searchsorted(special.pdtr(np.arange(rows), mean), u).astype(np.int64)
    positive = np.where(np.asarray(mean) > 0, mean, 1.0)
    counts = _counted(u, lambda k: special.pdtr(k, positive), lambda: special.pdtrik(u, positive))
    return np.asarray(np.where(np.asarray(mean) > 0, counts, 0))


def _binomial(u: Doubles, trials: Any, chance: Any) -> npt.NDArray[np.int64]:
    n, p = np.asarray(trials, np.float64), np.asarray(chance, np.float64)
    if np.any(n < 0) or np.any(n != np.floor(n)) or np.any(~((p >= 0) & (p <= 1))):
        raise ValueError("n is not a whole number of 0 or more, or p is not within [0, 1]")
    if n.ndim == p.ndim == 0 and n < _MOST_ROWS:
        k = np.searchsorted(special.bdtr(np.arange(int(n) + 1), int(n), float(p)), u)
        return np.minimum(k, int(n)).astype(np.int64)
    inner = (p > 0) & (p < 1) & (n > 0)
    chances, tries = np.where(inner, p, 0.5), np.where(inner, n, 1.0)

    def cdf(k: Any) -> Any:
        below = np.minimum(k, tries - 1)  # the distribution function in its form for whole and other numbers alike
        return np.where(k >= tries, 1.0, special.betaincc(below + 1, tries - below, chances))

    counts = _counted(u, cdf, lambda: special.bdtrik(u, tries, chances))
    return np.where(inner, np.minimum(counts, tries), np.where(p == 1, n, 0)).astype(np.int64)


def _geometric(u: Doubles, chance: Any) -> npt.NDArray[np.int64]:
    p = np.asarray(chance, np.float64)
    if np.any(~((p > 0) & (p <= 1))):
        raise ValueError("p is not within (0, 1]")
    with np.errstate(divide="ignore"):  # p = 1: the first try
        return _whole(np.maximum(np.ceil(np.log1p(-u) / np.log1p(-p)), 1.0))


def _integers(u: Doubles, low: Any, high: Any) -> npt.NDArray[np.int64]:
    """Return whole numbers of [low, high), each with a chance that is off by at most its share of 2^-52."""
    width = np.asarray(high, np.float64) - low
    if np.any(width <= 0):
        raise ValueError("low >= high")
    return _whole(np.asarray(low) + np.minimum(np.floor(u * width), width - 1))


def _chosen(u: Doubles, cumulated: Doubles) -> npt.NDArray[np.int64]:
    """Return the places of a table of cumulated probabilities, the last of which is 1."""
    return np.minimum(np.searchsorted(cumulated, u), cumulated.size - 1).astype(np.int64)


QUANTILES: dict[str, Quantile] = {
    "beta": lambda u, a, b: special.betaincinv(a, b, u),
    "binomial": _binomial,
    "cauchy": _cauchy,
    "choice": _chosen,
    "chisquare": lambda u, df: 2 * special.gammaincinv(np.multiply(df, 0.5), u),
    "exponential": _exponential,
    "f": lambda u, above, below: special.fdtri(above, below, u),
    "gamma": lambda u, shape: np.where(np.equal(shape, 0), 0.0, special.gammaincinv(shape, u)),
    "geometric": _geometric,
    "gumbel": lambda u: -np.log(_exponential(1 - u)),  # 1 - u is exact; -log(u) without its cancellation at 1
    "integers": _integers,
    "laplace": _laplace,
    "logistic": special.logit,
    "noncentral_chisquare": special.chndtrix,
    "normal": exact_normals,
    "order": lambda u: np.argsort(u, kind="stable").astype(np.int64),
    "pareto": lambda u, a: np.expm1(_exponential(u) / a),
    "poisson": _poisson,
    "power": lambda u, a: np.power(u, np.divide(1.0, a)),
    "rayleigh": lambda u: np.sqrt(2 * _exponential(u)),
    "t": lambda u, df: special.stdtrit(df, u),
    "uniform": lambda u: u.copy(),
    "weibull": lambda u, a: np.power(_exponential(u), np.divide(1.0, a)),
}


_POSITIVE = frozenset({"pareto", "power", "weibull"})


def inverted(name: str, uniforms: Doubles, values: tuple[Any, ...]) -> npt.NDArray[Any]:
    """Return the draws of a row for uniforms in (0, 1): float64 or int64 of the same shape.

    Raises ValueError for parameters that the distribution does not have.
    """
    if name in _POSITIVE and not (np.asarray(values[0]) > 0).all():
        raise ValueError(f"parameters outside those of {name}")  # its formula would give numbers all the same
    with np.errstate(all="ignore"):
        drawn = np.asarray(QUANTILES[name](uniforms, *values))
    if drawn.dtype.kind == "f" and np.isnan(drawn).any():
        raise ValueError(f"parameters outside those of {name}")
    return drawn
