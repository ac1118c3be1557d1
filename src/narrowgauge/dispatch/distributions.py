"""What the stand-ins for NumPy's generators draw number by number, from the tape of the run.

A draw is taken apart: the standard form comes from the tape, float64 and rounded once; `scale *` and `loc +` are two
operations of the arithmetic. Plain NumPy's own run of the kernel goes through the same stand-ins, on plain arrays.
Distributions with another parameter are made by inversion of the same uniforms; whole numbers are exact.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from narrowgauge.dispatch.feed import Feed, Line, feed_of
from narrowgauge.dispatch.setting import Wrapped

__all__ = ["REFUSED", "Draws"]

_NOT_MADE = "its numbers are no draws of a distribution"
REFUSED: dict[str, str] = {
    "bit_generator": "the draws of an audit come from its own streams; accepted: the generator's methods",
    "bytes": "bytes are no random input of a path; accepted: integers",
    "random_integers": "accepted: randint",
    "tomaxint": "accepted: randint",
}


class Draws:
    """What both stand-ins draw. The feed is a class attribute: the classes are made anew for each private copy."""

    _feed: Feed
    _plain: type
    _line: Line

    def __getattr__(self, name: str) -> Any:
        if name.startswith("__") or not hasattr(self._plain, name):
            raise AttributeError(f"{self._plain.__name__!r} object has no attribute {name!r}")
        message = f"{self._plain.__name__}.{name} is not offered by this version: {REFUSED.get(name, _NOT_MADE)}"

        def refused(*arguments: Any, **keywords: Any) -> Any:
            raise self._feed.fault(message)

        return refused if callable(getattr(self._plain, name)) else refused()

    def __repr__(self) -> str:
        return f"{self._plain.__name__} of an audit"

    def __copy__(self) -> Any:
        return self._on(self._feed.copied(self._line))

    def __deepcopy__(self, memo: object) -> Any:
        return self._on(self._feed.copied(self._line))

    def __reduce_ex__(self, protocol: Any) -> Any:
        return _restored, (self._feed.serial, self._plain.__name__, self._line.family, self._feed.now())

    def _on(self, line: Line) -> Any:
        """Return a generator of the same kind on another line."""
        made = object.__new__(type(self))
        made._line = line
        return made

    def normal(self, loc: Any = 0.0, scale: Any = 1.0, size: Any = None) -> Any:
        """Return loc + scale * z: two rounded operations."""
        return self._scaled("normal", loc, scale, size)

    def standard_cauchy(self, size: Any = None) -> Any:
        """Return standard Cauchy draws."""
        return self._take("cauchy", size)

    def exponential(self, scale: Any = 1.0, size: Any = None) -> Any:
        """Return scale * e: one rounded operation."""
        return self._scaled("exponential", 0.0, scale, size)

    def laplace(self, loc: Any = 0.0, scale: Any = 1.0, size: Any = None) -> Any:
        """Return loc + scale * x: two rounded operations."""
        return self._scaled("laplace", loc, scale, size)

    def logistic(self, loc: Any = 0.0, scale: Any = 1.0, size: Any = None) -> Any:
        """Return loc + scale * x: two rounded operations."""
        return self._scaled("logistic", loc, scale, size)

    def gumbel(self, loc: Any = 0.0, scale: Any = 1.0, size: Any = None) -> Any:
        """Return loc + scale * x: two rounded operations."""
        return self._scaled("gumbel", loc, scale, size)

    def rayleigh(self, scale: Any = 1.0, size: Any = None) -> Any:
        """Return scale * x: one rounded operation."""
        return self._scaled("rayleigh", 0.0, scale, size)

    def lognormal(self, mean: Any = 0.0, sigma: Any = 1.0, size: Any = None) -> Any:
        """Return exp(mean + sigma * z): three rounded operations."""
        drawn = np.exp(self._scaled("normal", mean, sigma, size))
        return self._settled(drawn) if size is None and self._feed.shape_of(drawn) == () else drawn

    def gamma(self, shape: Any, scale: Any = 1.0, size: Any = None) -> Any:
        """Return scale * g: one rounded operation."""
        return self._scaled("gamma", 0.0, scale, size, shape)

    def uniform(self, low: Any = 0.0, high: Any = 1.0, size: Any = None) -> Any:
        """Return low + (high - low) * u: rounded operations; as in NumPy the result may round to `high`."""
        low, high = self._listed(low), self._listed(high)
        width = high - low
        drawn = self._take("uniform", size, (), (low, high))
        return self._moved(drawn, low, width, size)

    def beta(self, a: Any, b: Any, size: Any = None) -> Any:
        """Return beta draws."""
        return self._take("beta", size, (a, b))

    def chisquare(self, df: Any, size: Any = None) -> Any:
        """Return chi-square draws."""
        return self._take("chisquare", size, (df,))

    def noncentral_chisquare(self, df: Any, nonc: Any, size: Any = None) -> Any:
        """Return noncentral chi-square draws."""
        return self._take("noncentral_chisquare", size, (df, nonc))

    def noncentral_f(self, dfnum: Any, dfden: Any, nonc: Any, size: Any = None) -> Any:
        """Return draws of the noncentral F distribution."""
        return self._take("noncentral_f", size, (dfnum, dfden, nonc))

    def f(self, dfnum: Any, dfden: Any, size: Any = None) -> Any:
        """Return draws of the F distribution."""
        return self._take("f", size, (dfnum, dfden))

    def standard_t(self, df: Any, size: Any = None) -> Any:
        """Return draws of Student's t."""
        return self._take("t", size, (df,))

    def pareto(self, a: Any, size: Any = None) -> Any:
        """Return draws of the Lomax distribution."""
        return self._take("pareto", size, (a,))

    def power(self, a: Any, size: Any = None) -> Any:
        """Return draws of the power distribution."""
        return self._take("power", size, (a,))

    def weibull(self, a: Any, size: Any = None) -> Any:
        """Return Weibull draws."""
        return self._take("weibull", size, (a,))

    def wald(self, mean: Any, scale: Any, size: Any = None) -> Any:
        """Return draws of the inverse Gaussian distribution."""
        return self._take("wald", size, (mean, scale))

    def triangular(self, left: Any, mode: Any, right: Any, size: Any = None) -> Any:
        """Return draws of the triangular distribution."""
        return self._take("triangular", size, (left, mode, right))

    def vonmises(self, mu: Any, kappa: Any, size: Any = None) -> Any:
        """Return angles in [-pi, pi]: mu + x, and what turns it back as NumPy does, operation by operation."""
        mu = self._listed(mu)
        drawn = self._take("vonmises", size, (kappa,), (mu,))
        if not isinstance(mu, Wrapped) and not np.ndim(mu) and mu == 0:
            return drawn
        moved = mu + drawn
        turned = np.sign(moved) * (np.fmod(np.abs(moved) + np.pi, 2 * np.pi) - np.pi)
        return self._settled(turned) if size is None and self._feed.shape_of(turned) == () else turned

    def poisson(self, lam: Any = 1.0, size: Any = None) -> Any:
        """Return counts."""
        return self._take("poisson", size, (lam,))

    def binomial(self, n: Any, p: Any, size: Any = None) -> Any:
        """Return counts."""
        return self._take("binomial", size, (n, p))

    def geometric(self, p: Any, size: Any = None) -> Any:
        """Return the tries up to the first success."""
        return self._take("geometric", size, (p,))

    def negative_binomial(self, n: Any, p: Any, size: Any = None) -> Any:
        """Return failures before n successes."""
        return self._take("negative_binomial", size, (n, p))

    def hypergeometric(self, ngood: Any, nbad: Any, nsample: Any, size: Any = None) -> Any:
        """Return counts."""
        return self._take("hypergeometric", size, (ngood, nbad, nsample))

    def logseries(self, p: Any, size: Any = None) -> Any:
        """Return counts."""
        return self._take("logseries", size, (p,))

    def zipf(self, a: Any, size: Any = None) -> Any:
        """Return counts."""
        return self._take("zipf", size, (a,))

    def _take(self, name: str, size: Any, parameters: tuple[Any, ...] = (), others: tuple[Any, ...] = ()) -> Any:
        return self._feed.take(self._line, name, size, tuple(map(self._listed, parameters)), others=others)

    def _scaled(self, name: str, loc: Any, scale: Any, size: Any, *parameters: Any) -> Any:
        loc, scale = self._listed(loc), self._listed(scale)
        bare = np.asarray(self._feed.bare(scale), np.float64)
        if np.any(np.signbit(bare) & ~np.isnan(bare)):
            raise ValueError("scale < 0")
        return self._moved(self._take(name, size, parameters, (loc, scale)), loc, scale, size)

    def _moved(self, drawn: Any, loc: Any, scale: Any, size: Any) -> Any:
        """Return loc + scale * drawn; what is plainly 1 or 0 is left out, since nothing is rounded there."""
        if isinstance(scale, Wrapped) or np.ndim(scale) or scale != 1:
            drawn = scale * drawn
        if isinstance(loc, Wrapped) or np.ndim(loc) or loc != 0:
            drawn = loc + drawn
        return self._settled(drawn) if size is None and self._feed.shape_of(drawn) == () else drawn

    def _settled(self, value: Any) -> Any:
        """Return one value as NumPy's generators return it: a Python float in plain code."""
        return self._feed.held(self._feed.bare(value), scalar=True)

    def _listed(self, value: Any) -> Any:
        """Return a list of plain numbers as an array."""
        return np.asarray(self._feed.bare(value)) if isinstance(value, (list, tuple)) else value

    def _filled(self, drawn: Callable[[Any], Any], size: Any, dtype: Any, out: Any) -> Any:
        """Return draws as the methods do that take `dtype` and `out`."""
        if np.dtype(dtype) != np.float64:
            raise self._feed.fault(f"the kernel fixes dtype {np.dtype(dtype)}; accepted: float64 or none")
        if out is None:
            return drawn(size)
        out[...] = drawn(self._feed.shape_of(out))
        return out

    def _whole(self, low: Any, high: Any, size: Any, dtype: Any, endpoint: bool) -> Any:
        """Return whole numbers of [low, high) or, with endpoint, [low, high]; one is of Python for its types."""
        low, high = (0, low) if high is None else (low, high)
        kind = np.dtype(dtype)
        if kind.kind not in "biu":
            raise TypeError(f"Unsupported dtype {kind!r} for integers")
        drawn = self._take("integers", size, (low, self._listed(high) + 1 if endpoint else high))
        bare = self._feed.bare(drawn)
        if isinstance(bare, np.ndarray):
            return drawn if kind == bare.dtype else drawn.astype(kind)
        one = dtype(bare) if dtype in (int, bool) else kind.type(bare)
        return one if self._feed.setting is None else self._feed.setting.wrap(one)


def _restored(serial: int, kind: str, family: Any, born: tuple[int, int]) -> Any:
    """Return an unpickled generator, on the tape of the run that it was pickled in."""
    feed = feed_of(serial)
    made = object.__new__(feed.kinds[kind])
    made._line = feed.copied(Line(family), born)
    return made
