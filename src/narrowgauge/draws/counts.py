"""Draws of whole numbers, by inversion: quantile functions for the rows of `draws.quantiles`, and orders of places."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import special

__all__ = [
    "binomial",
    "chosen",
    "geometric",
    "hypergeometric",
    "integers",
    "logseries",
    "multinomial",
    "multivariate_hypergeometric",
    "negative_binomial",
    "ordered",
    "poisson",
    "zipf",
]

Counts = npt.NDArray[np.int64]
Doubles = npt.NDArray[np.float64]

_MOST_ROWS = 2**16  # of a table of cumulated probabilities
_LARGEST = 2.0**63 - 2.0**10  # the last float64 that an int64 holds
_LOGSERIES = 1 - 1e-5  # beyond it a table has too many rows


def poisson(u: Doubles, mean: Any) -> Counts:
    """Return counts of that mean."""
    if np.any(~(np.asarray(mean) >= 0)):
        raise ValueError("lam < 0 or lam is NaN")
    # By Chernoff's bound the count stays below the last row with probability above 1 - 2^-60.
    rows = int(np.max(mean, initial=0.0) + 10 * math.sqrt(np.max(mean, initial=0.0))) + 64
    if np.ndim(mean) == 0 and rows <= _MOST_ROWS:
        return np.searchsorted(special.pdtr(np.arange(rows), mean), u).astype(np.int64)
    positive = np.where(np.asarray(mean) > 0, mean, 1.0)
    counts = _counted(u, lambda k: special.pdtr(k, positive), lambda: special.pdtrik(u, positive))
    return np.asarray(np.where(np.asarray(mean) > 0, counts, 0))


def binomial(u: Doubles, trials: Any, chance: Any) -> Counts:
    """Return successes among so many trials."""
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


def negative_binomial(u: Doubles, successes: Any, chance: Any) -> Counts:
    """Return failures before so many successes, which need not be a whole number."""
    n, p = np.asarray(successes, np.float64), np.asarray(chance, np.float64)
    if np.any(~(n > 0)) or np.any(~((p > 0) & (p <= 1))):
        raise ValueError("n <= 0 or p is not within (0, 1]")
    chances = np.where(p < 1, p, 0.5)
    counts = _counted(u, lambda k: special.betainc(n, k + 1, chances), lambda: special.nbdtrik(u, n, chances))
    return np.where(p < 1, counts, 0).astype(np.int64)


def geometric(u: Doubles, chance: Any) -> Counts:
    """Return the tries up to the first success."""
    p = np.asarray(chance, np.float64)
    if np.any(~((p > 0) & (p <= 1))):
        raise ValueError("p is not within (0, 1]")
    with np.errstate(divide="ignore"):  # p = 1: the first try
        return _whole(np.maximum(np.ceil(np.log1p(-u) / np.log1p(-p)), 1.0))


def zipf(u: Doubles, exponent: Any) -> Counts:
    """Return k with chances in proportion to k^-a; as in NumPy they fit an int64.

    The chance of more than k is zeta(a, k + 1) / zeta(a, 1) with Hurwitz's zeta, which lies between the integrals of
    x^-a from k and from k + 1 on: that leaves three whole numbers to try, with one for rounding.
    """
    a = np.asarray(exponent, np.float64)
    if np.any(~(a > 1)):
        raise ValueError("a <= 1 or a is NaN")
    a = np.minimum(a, 1025.0)  # beyond it every draw is 1
    tail = (1 - u) * special.zeta(a, 1.0) + u * special.zeta(a, _LARGEST)  # without what is left out; 1 - u is exact
    k = np.clip(np.ceil(np.power(tail * (a - 1), -1 / (a - 1))) - 2, 1.0, _LARGEST)
    for _ in range(3):
        k = np.where(special.zeta(a, k + 1) > tail, k + 1, k)
    return _whole(k)


def logseries(u: Doubles, chance: Any) -> Counts:
    """Return k with chances in proportion to p^k / k, from tables."""
    p = np.asarray(chance, np.float64)
    if np.any(~((p >= 0) & (p < 1))):
        raise ValueError("p is not within [0, 1)")
    if np.any(p > _LOGSERIES):
        raise ValueError(f"p of logseries up to {_LOGSERIES} is offered")

    def table(value: float) -> tuple[int, Doubles]:
        # The tail beyond k is below value^k / (1 - value), which 2^-60 of its largest term bounds.
        rows = 1 if value == 0 else 64 + int(64 * math.log(2) / -math.log(value))
        k = np.arange(1.0, rows + 1)
        return 1, np.cumsum(np.power(value, k - 1) / k)

    return _tabled(u, (p,), table)


def hypergeometric(u: Doubles, good: Any, bad: Any, taken: Any) -> Counts:
    """Return the good ones among so many taken from good and bad ones, from tables."""
    parameters = tuple(np.asarray(value, np.float64) for value in (good, bad, taken))
    if any(np.any(~(value >= 0)) or np.any(value != np.floor(value)) for value in parameters):
        raise ValueError("ngood, nbad or nsample is not a whole number of 0 or more")
    if np.any(parameters[0] + parameters[1] < parameters[2]):
        raise ValueError("ngood + nbad < nsample")

    def table(ngood: float, nbad: float, n: float) -> tuple[int, Doubles]:
        mean = n * ngood / max(ngood + nbad, 1.0)
        # Hoeffding (1963), section 6: beyond mean +- t with a chance below 2 exp(-2 t^2 / n), here below 2^-60.
        reach = math.sqrt(21 * n) + 1
        low, high = max(0.0, n - nbad, math.floor(mean - reach)), min(ngood, n, math.ceil(mean + reach))
        k = np.arange(low, high + 1)
        ways = _log_choices(ngood, k) + _log_choices(nbad, n - k)
        return int(low), np.cumsum(np.exp(ways - ways.max()))

    return _tabled(u, parameters, table)


def integers(u: Doubles, low: Any, high: Any) -> Counts:
    """Return whole numbers of [low, high), each with a chance that is off by at most its share of 2^-52."""
    width = np.asarray(high, np.float64) - low
    if np.any(width <= 0):
        raise ValueError("low >= high")
    return _whole(np.asarray(low) + np.minimum(np.floor(u * width), width - 1))


def chosen(u: Doubles, cumulated: Doubles) -> Counts:
    """Return the places of a table of cumulated probabilities, the last of which is 1."""
    return np.minimum(np.searchsorted(cumulated, u), cumulated.size - 1).astype(np.int64)


def ordered(u: Doubles, weights: Any = 1.0) -> Counts:
    """Return the places along the first axis in random order: equally likely, or drawn one after the other by weight.

    With weights w the places are sorted by exponential draws over w: the smallest of them is place i with a chance of
    w_i over the sum of all, and the same holds for those that remain.
    """
    with np.errstate(divide="ignore"):  # a weight of 0 comes last
        keys = u if np.ndim(weights) == 0 else -np.log1p(-u) / weights
    return np.argsort(keys, axis=0, kind="stable").astype(np.int64)


def multinomial(u: Doubles, trials: Any, chances: Any) -> Counts:
    """Return counts of categories, which lie along the first axis: binomial draws one after the other.

    The last category takes what is left, and its uniforms are not used.
    """
    n, p = np.asarray(trials, np.float64), np.asarray(chances, np.float64)
    if np.any(~(p >= 0)) or np.any(p[:-1].sum(axis=0) > 1 + 1e-12):
        raise ValueError("pvals < 0, or sum(pvals[:-1]) > 1.0")
    left = np.broadcast_to(n, u.shape[1:]).astype(np.int64)
    rest = np.ones(p.shape[1:])
    counts = np.zeros(u.shape, np.int64)
    for place in range(u.shape[0] - 1):
        share = np.clip(np.divide(p[place], rest, out=np.ones_like(rest), where=rest > 0), 0.0, 1.0)
        counts[place] = binomial(u[place], left, np.broadcast_to(share, left.shape))
        left = left - counts[place]
        rest = rest - p[place]
    counts[-1] = left
    return counts


def multivariate_hypergeometric(u: Doubles, taken: Any, colors: Any) -> Counts:
    """Return how many of each colour are taken; colours lie along the first axis: one after the other.

    The last colour takes what is left, and its uniforms are not used.
    """
    there = np.asarray(colors, np.float64)
    left = np.broadcast_to(np.asarray(taken, np.float64), u.shape[1:])
    counts = np.zeros(u.shape, np.int64)
    for place in range(u.shape[0] - 1):
        others = there[place + 1 :].sum(axis=0)
        counts[place] = hypergeometric(u[place], there[place], others, left)
        left = left - counts[place]
    counts[-1] = left.astype(np.int64)
    return counts


def _counted(u: Doubles, cdf: Callable[[Any], Any], guess: Callable[[], Any]) -> Counts:
    """Return the smallest k with cdf(k) >= u: `guess` inverts a continuous cdf, whose rounding may be off by one."""
    k = np.maximum(np.ceil(guess()), 0.0)
    k = np.where((k > 0) & (cdf(np.maximum(k - 1, 0.0)) >= u), k - 1, k)
    k = np.where(cdf(k) < u, k + 1, k)
    return _whole(k)


def _tabled(u: Doubles, parameters: tuple[Any, ...], table: Callable[..., tuple[int, Doubles]]) -> Counts:
    """Return the smallest k whose cumulated weight reaches u of the whole.

    `table` gives the first k and the cumulated weights, once for each set of parameters that comes up.
    """
    together = np.broadcast_arrays(*parameters)
    if together[0].ndim == 0:
        first, weights = table(*(float(value) for value in together))
        return np.asarray(first + np.minimum(np.searchsorted(weights, u * weights[-1]), weights.size - 1), np.int64)
    sets = np.stack([np.broadcast_to(value, u.shape).ravel() for value in together])
    distinct, which = np.unique(sets, axis=1, return_inverse=True)
    counts, flat = np.zeros(u.size, np.int64), u.ravel()
    places = np.split(np.argsort(which, kind="stable"), np.cumsum(np.bincount(which.ravel()))[:-1])
    for values, mine in zip(distinct.T, places, strict=True):
        counts[mine] = _tabled(flat[mine], tuple(values), table)
    return counts.reshape(u.shape)


def _log_choices(n: float, k: Doubles) -> Doubles:
    return np.asarray(-special.betaln(n - k + 1, k + 1) - math.log(n + 1))


def _whole(k: Any) -> Counts:
    if not np.all(np.isfinite(k) & (np.abs(k) <= _LARGEST)):
        raise ValueError("no whole number has these parameters")
    return np.asarray(k).astype(np.int64)
