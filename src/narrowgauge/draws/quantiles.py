"""Draws of every other distribution, by inversion of the uniforms: a row for each.

A row is the quantile function of the standard form (location 0, scale 1): (uniforms, *parameters) -> float64, or int64
where the draws are whole numbers. Uniforms lie in (0, 1); parameters are floats, or float64 arrays that broadcast.
Draws of several numbers at once (orders, shares, counts of categories) have them along the first axis.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import special

from narrowgauge.draws import counts
from narrowgauge.draws.normals import exact_normals

__all__ = ["ADDITIVE", "QUANTILES", "inverted"]

Doubles = npt.NDArray[np.float64]
Quantile = Callable[..., Any]

_MOST_HALVINGS = 64  # of a bracket of 2 pi: beyond a float64
_SETTLED = 2.0**-48  # a last step of Newton's method, in radians or in probability
_SMALL = 2.0**-60
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


def _triangular(u: Doubles, left: Any, mode: Any, right: Any) -> Doubles:
    width, rise = np.subtract(right, left), np.subtract(mode, left)
    if np.any(~(rise >= 0)) or np.any(~(np.subtract(right, mode) >= 0)) or np.any(~(width > 0)):
        raise ValueError("left > mode, mode > right, or left == right")
    below = u * width <= rise
    upper = right - np.sqrt((1 - u) * width * (width - rise))
    return np.asarray(np.where(below, left + np.sqrt(u * width * rise), upper))


def _vonmises(u: Doubles, concentration: Any) -> Doubles:
    """Return angles around 0 in [-pi, pi]: the distribution function is inverted by Newton's method in a bracket."""
    from scipy.stats import vonmises  # heavy, and few need it

    kappa = np.broadcast_to(np.asarray(concentration, np.float64), u.shape)
    if np.any(~(kappa >= 0)):
        raise ValueError("kappa < 0 or kappa is NaN")
    low, high = np.full(u.shape, -np.pi), np.full(u.shape, np.pi)
    x: Doubles = np.clip(special.ndtri(u) / np.sqrt(kappa + 0.3), -3.0, 3.0)
    for _ in range(_MOST_HALVINGS):
        excess = vonmises.cdf(x, kappa) - u
        low, high = np.where(excess < 0, x, low), np.where(excess < 0, high, x)
        step = x - excess * 2 * np.pi * special.i0e(kappa) / np.exp(kappa * (np.cos(x) - 1))
        settled = (np.abs(step - x) <= _SETTLED) | (np.abs(excess) <= _SETTLED)
        if settled.all():
            break
        x = np.where(settled, x, np.where((low < step) & (step < high), step, 0.5 * (low + high)))
    return x


def _wald(u: Doubles, mean: Any, scale: Any) -> Doubles:
    if np.any(~(np.asarray(mean) > 0)) or np.any(~(np.asarray(scale) > 0)):
        raise ValueError("mean <= 0 or scale <= 0")
    from scipy.stats import invgauss  # heavy, and few need it

    return np.asarray(invgauss.ppf(u, np.divide(mean, scale)) * scale)


def _dirichlet(u: Doubles, alpha: Any) -> Doubles:
    """Return shares along the first axis: gamma draws over their sum, by logarithms, so that none is 0 / 0."""
    shapes = np.broadcast_to(np.asarray(alpha, np.float64), u.shape)
    if np.any(~(shapes >= 0)):
        raise ValueError("alpha < 0")
    inner = np.where(shapes > 0, shapes, 1.0)
    draws = special.gammaincinv(inner, u)
    # For small x the distribution function is x^a / gamma(a + 1), to a relative error below x.
    logs = np.where(draws < _SMALL, (np.log(u) + special.gammaln(inner + 1)) / inner, np.log(draws))
    shares = np.where(shapes > 0, np.exp(logs - np.where(shapes > 0, logs, -np.inf).max(axis=0)), 0.0)
    return np.asarray(shares / np.maximum(shares.sum(axis=0), _SMALL))


QUANTILES: dict[str, Quantile] = {
    "beta": lambda u, a, b: special.betaincinv(a, b, u),
    "binomial": counts.binomial,
    "cauchy": _cauchy,
    "choice": counts.chosen,
    "chisquare": lambda u, df: 2 * special.gammaincinv(np.multiply(df, 0.5), u),
    "dirichlet": _dirichlet,
    "exponential": _exponential,
    "f": lambda u, above, below: special.fdtri(above, below, u),
    "gamma": lambda u, shape: np.where(np.equal(shape, 0), 0.0, special.gammaincinv(shape, u)),
    "geometric": counts.geometric,
    "gumbel": lambda u: -np.log(_exponential(1 - u)),  # 1 - u is exact; -log(u) without its cancellation at 1
    "hypergeometric": counts.hypergeometric,
    "integers": counts.integers,
    "laplace": _laplace,
    "logistic": special.logit,
    "logseries": counts.logseries,
    "multinomial": counts.multinomial,
    "multivariate_hypergeometric": counts.multivariate_hypergeometric,
    "negative_binomial": counts.negative_binomial,
    "noncentral_chisquare": special.chndtrix,
    "noncentral_f": lambda u, above, below, apart: special.ncfdtri(above, below, apart, u),
    "normal": exact_normals,
    "order": counts.ordered,
    "pareto": lambda u, a: np.expm1(_exponential(u) / a),
    "poisson": counts.poisson,
    "power": lambda u, a: np.power(u, np.divide(1.0, a)),
    "rayleigh": lambda u: np.sqrt(2 * _exponential(u)),
    "t": lambda u, df: special.stdtrit(df, u),
    "triangular": _triangular,
    "uniform": lambda u: u.copy(),
    "vonmises": _vonmises,
    "wald": _wald,
    "weibull": lambda u, a: np.power(_exponential(u), np.divide(1.0, a)),
    "zipf": counts.zipf,
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
