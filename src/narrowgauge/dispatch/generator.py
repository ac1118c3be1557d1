"""Stand-ins for NumPy's Generator and RandomState, which draw from the tape of the run.

A draw is taken apart: the standard form comes from the tape, float64 and rounded once; `scale *` and `loc +` are two
operations of the arithmetic. Plain NumPy's own run of the kernel goes through the same stand-ins, on plain arrays.
Distributions with another parameter are made by inversion of the same uniforms; whole numbers are exact.
"""

from __future__ import annotations

import operator
from collections.abc import Callable
from typing import Any

import numpy as np

from narrowgauge.dispatch.feed import Feed, Line, family_of, feed_of
from narrowgauge.dispatch.setting import Wrapped

__all__ = ["REFUSED", "Draws", "GeneratorDraws", "RandomStateDraws"]

_NOT_MADE = "the draws of an audit are made by inversion, one uniform each, which this distribution is not offered for"
REFUSED: dict[str, str] = {
    "bit_generator": "the draws of an audit come from its own streams; accepted: the generator's methods",
    "bytes": "bytes are no random input of a path",
    "dirichlet": "accepted: gamma draws divided by their sum",
    "hypergeometric": _NOT_MADE,
    "logseries": _NOT_MADE,
    "multinomial": "accepted: binomial draws one after the other",
    "multivariate_hypergeometric": _NOT_MADE,
    "multivariate_normal": "its factor of the covariance is hidden; accepted: standard_normal, and the factor in "
    "the kernel's own arithmetic",
    "negative_binomial": "accepted: poisson with a gamma parameter",
    "noncentral_f": "accepted: the ratio of a noncentral_chisquare and a chisquare draw",
    "permuted": "accepted: permutation",
    "random_integers": "accepted: randint",
    "tomaxint": "accepted: randint",
    "triangular": _NOT_MADE,
    "vonmises": _NOT_MADE,
    "wald": _NOT_MADE,
    "zipf": _NOT_MADE,
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

    def poisson(self, lam: Any = 1.0, size: Any = None) -> Any:
        """Return counts."""
        return self._take("poisson", size, (lam,))

    def binomial(self, n: Any, p: Any, size: Any = None) -> Any:
        """Return counts."""
        return self._take("binomial", size, (n, p))

    def geometric(self, p: Any, size: Any = None) -> Any:
        """Return the tries up to the first success."""
        return self._take("geometric", size, (p,))

    def permutation(self, x: Any, axis: int = 0) -> Any:
        """Return whole numbers below x, or the rows of x, in the order of as many uniforms."""
        if axis:
            raise self._feed.fault("axis= of permutation is not offered by this version; accepted: 0")
        count = _count(x)
        return self._take("order", operator.index(x)) if count is None else self._entries(x, self._take("order", count))

    def shuffle(self, x: Any, axis: int = 0) -> None:
        """Put the rows of x into the order of as many uniforms, in place."""
        if axis:
            raise self._feed.fault("axis= of shuffle is not offered by this version; accepted: 0")
        order = self._feed.bare(self._take("order", len(x)))
        x[:] = [x[place] for place in order.tolist()] if isinstance(x, list) else x[order]

    def choice(  # noqa: PLR0917  # NumPy's signature
        self, a: Any, size: Any = None, replace: bool = True, p: Any = None, axis: int = 0, shuffle: bool = True
    ) -> Any:
        """Return whole numbers below a, or entries of a, drawn with replacement."""
        if not replace or axis:
            what = "axis=" if axis else "replace=False"
            raise self._feed.fault(f"{what} of choice is not offered by this version; accepted: replace=True, axis=0")
        rows = _count(a)
        count = operator.index(a) if rows is None else rows
        if p is None:
            places = self._take("integers", size, (0, count))
        else:
            if isinstance(p, Wrapped):
                self._feed.remark("p of choice is of the state: the draw is computed in float64 from its values")
            chances = np.asarray(self._feed.bare(p), np.float64)
            if chances.shape != (count,) or np.any(~(chances >= 0)) or not chances.any():
                raise ValueError("'a' and 'p' must have same size, and 'p' must not be negative")
            cumulated = np.cumsum(chances)
            places = self._feed.take(self._line, "choice", size, tables=(cumulated / cumulated[-1],))
        return places if rows is None else self._entries(a, places)

    def _entries(self, table: Any, places: Any) -> Any:
        """Return entries of a table or list, or the rows of an array, which may be of the state."""
        rows = np.asarray(self._feed.bare(table)) if isinstance(table, (list, tuple)) else table
        return self._feed.constants(rows[self._feed.bare(places)])

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


class GeneratorDraws(Draws):
    """Stands in for np.random.Generator: passes isinstance, and is copied, pickled and spawned as it is."""

    __class__ = np.random.Generator  # type: ignore[assignment]
    _plain = np.random.Generator

    def __init__(self, bit_generator: Any) -> None:
        line = getattr(bit_generator, "_line", None)
        self._line = line if isinstance(line, Line) else self._feed.line()

    def random(self, size: Any = None, dtype: Any = np.float64, out: Any = None) -> Any:
        """Return uniforms."""
        return self._filled(lambda shape: self._take("uniform", shape), size, dtype, out)

    def standard_normal(self, size: Any = None, dtype: Any = np.float64, out: Any = None) -> Any:
        """Return standard normals."""
        return self._filled(lambda shape: self._take("normal", shape), size, dtype, out)

    def standard_exponential(
        self, size: Any = None, dtype: Any = np.float64, method: str = "zig", out: Any = None
    ) -> Any:
        """Return standard exponential draws; by inversion, whatever the method."""
        return self._filled(lambda given: self._take("exponential", given), size, dtype, out)

    def standard_gamma(self, shape: Any, size: Any = None, dtype: Any = np.float64, out: Any = None) -> Any:
        """Return gamma draws of scale 1."""
        return self._filled(lambda given: self._take("gamma", given, (shape,)), size, dtype, out)

    def integers(
        self, low: Any, high: Any = None, size: Any = None, dtype: Any = np.int64, endpoint: bool = False
    ) -> Any:
        """Return whole numbers."""
        return self._whole(low, high, size, dtype, endpoint)

    def spawn(self, n_children: int) -> list[Any]:
        """Return generators whose numbers are their own: further ones of the same tape."""
        return [self._on(self._feed.line()) for _ in range(n_children)]


class RandomStateDraws(Draws):
    """Stands in for np.random.RandomState, and for the functions of np.random."""

    __class__ = np.random.RandomState  # type: ignore[assignment]
    _plain = np.random.RandomState

    def __init__(self, seed: Any = None) -> None:
        line = getattr(seed, "_line", None)
        self._line = line if isinstance(line, Line) else self._feed.line(family_of("MT19937", seed))

    def seed(self, seed: Any = None) -> None:
        """Take note of a seed, which changes no draw."""
        self._feed.remark("a seed of np.random is ignored: the draws are those of the audit's own streams")
        self._line = self._feed.line(family_of("MT19937", seed))

    def get_state(self, legacy: bool = True) -> Any:
        """Return a state of NumPy's form, for set_state alone."""
        plain = np.random.RandomState(0)
        return plain.get_state(legacy=True) if legacy else plain.get_state(legacy=False)

    def set_state(self, state: Any) -> None:
        """Take note of a state, which changes no draw."""
        self._feed.remark("set_state of np.random is ignored: no draws are repeated")

    def rand(self, *shape: Any) -> Any:
        """Return uniforms."""
        return self._take("uniform", shape or None)

    def randn(self, *shape: Any) -> Any:
        """Return standard normals."""
        return self._take("normal", shape or None)

    def random_sample(self, size: Any = None) -> Any:
        """Return uniforms."""
        return self._take("uniform", size)

    random = ranf = sample = random_sample

    def standard_normal(self, size: Any = None) -> Any:
        """Return standard normals."""
        return self._take("normal", size)

    def standard_exponential(self, size: Any = None) -> Any:
        """Return standard exponential draws."""
        return self._take("exponential", size)

    def standard_gamma(self, shape: Any, size: Any = None) -> Any:
        """Return gamma draws of scale 1."""
        return self._take("gamma", size, (shape,))

    def randint(self, low: Any, high: Any = None, size: Any = None, dtype: Any = int) -> Any:
        """Return whole numbers."""
        return self._whole(low, high, size, dtype, endpoint=False)


def _count(table: Any) -> int | None:
    """Return the number of rows of a table, None for a number."""
    return len(table) if np.iterable(table) else None  # type: ignore[arg-type]  # a table has a length


def _restored(serial: int, kind: str, family: Any, born: tuple[int, int]) -> Any:
    """Return an unpickled generator, on the tape of the run that it was pickled in."""
    feed = feed_of(serial)
    made = object.__new__(feed.kinds[kind])
    made._line = feed.copied(Line(family), born)
    return made
