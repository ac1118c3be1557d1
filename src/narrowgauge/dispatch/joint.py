"""What the stand-ins for NumPy's generators draw several numbers at a time: vectors, counts of categories, orders.

Vectors and counts are one request of the tape, with the numbers that belong together along its first axis: they are
computed in float64 from a uniform each, and rounded once. Only the normals of a vector are taken apart, as NumPy does.
"""

from __future__ import annotations

import math
import operator
import warnings
from typing import Any

import numpy as np

from narrowgauge.dispatch.distributions import Draws
from narrowgauge.dispatch.scalar import State
from narrowgauge.dispatch.setting import Wrapped

__all__ = ["JointDraws"]


class JointDraws(Draws):
    """Draws of several numbers at a time."""

    def dirichlet(self, alpha: Any, size: Any = None) -> Any:
        """Return shares of gamma draws, along the last axis; NumPy's own method differs where every alpha is small."""
        alpha = self._listed(alpha)
        return self._vectors("dirichlet", _shape(size), (), alpha)

    def multinomial(self, n: Any, pvals: Any, size: Any = None) -> Any:
        """Return counts of categories, along the last axis, from binomial draws one after the other."""
        n, pvals = self._listed(n), self._listed(pvals)
        shape = self._feed.shape_of(n) if size is None else _shape(size)
        return self._vectors("multinomial", shape, (n,), pvals)

    def multivariate_hypergeometric(
        self, colors: Any, nsample: Any, size: Any = None, method: str = "marginals"
    ) -> Any:
        """Return counts of colours, along the last axis, from hypergeometric draws one after the other."""
        colors = self._listed(colors)
        return self._vectors("multivariate_hypergeometric", _shape(size), (nsample,), colors)

    def multivariate_normal(
        self,
        mean: Any,
        cov: Any,
        size: Any = None,
        check_valid: str = "warn",
        tol: float = 1e-8,
        *,
        method: str = "svd",
    ) -> Any:
        """Return vectors mean + factor z, along the last axis, in the arithmetic; the factor is computed in float64.

        Raises ValueError as NumPy does for shapes that do not fit, and for other words in `check_valid` and `method`.
        """
        mean = self._listed(mean)
        center, matrix = (np.asarray(self._feed.bare(given), np.float64) for given in (mean, cov))
        if center.ndim != 1:
            raise ValueError("mean must be 1 dimensional")
        if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1]:
            raise ValueError("cov must be 2 dimensional and square")
        if center.size != matrix.shape[0]:
            raise ValueError("mean and cov must have same length")
        if isinstance(cov, State):
            self._feed.remark("the covariance of multivariate_normal is factored in float64, from its values")
        factor = self._factor(matrix, method, check_valid, tol)
        drawn = self._take("normal", (*_shape(size), center.size))
        return (mean + drawn.reshape(-1, center.size) @ factor).reshape((*_shape(size), center.size))

    def permutation(self, x: Any, axis: int = 0) -> Any:
        """Return whole numbers below x, or the slices of x along an axis, in the order of as many uniforms."""
        if not np.iterable(x):
            return self._take("order", operator.index(x))
        rows: Any = np.asarray(self._feed.bare(x)) if isinstance(x, (list, tuple)) else x
        return self._entries(rows, self._take("order", rows.shape[axis]), axis)

    def shuffle(self, x: Any, axis: int = 0) -> None:
        """Put the slices of x along an axis into the order of as many uniforms, in place."""
        if isinstance(x, list):
            order = self._feed.bare(self._take("order", len(x)))
            x[:] = [x[place] for place in order.tolist()]
            return
        x[...] = np.take(x, self._feed.bare(self._take("order", x.shape[axis])), axis=axis)

    def choice(  # noqa: PLR0917  # NumPy's signature
        self, a: Any, size: Any = None, replace: bool = True, p: Any = None, axis: int = 0, shuffle: bool = True
    ) -> Any:
        """Return whole numbers below a, or entries of a along an axis, drawn with replacement or without."""
        table: Any = np.asarray(self._feed.bare(a)) if isinstance(a, (list, tuple)) else a
        is_table = np.iterable(a)
        count = table.shape[axis] if is_table else operator.index(a)
        chances = None if p is None else self._chances(p, count)
        if not replace:
            places = self._distinct(count, size, chances)
        elif chances is None:
            places = self._take("integers", size, (0, count))
        else:
            cumulated = np.cumsum(chances)
            places = self._feed.take(self._line, "choice", size, tables=(cumulated / cumulated[-1],))
        return self._entries(table, places, axis) if is_table else places

    def _distinct(self, count: int, size: Any, chances: Any) -> Any:
        """Return the first places of a random order."""
        wanted = math.prod(_shape(size))
        if wanted > count:
            raise ValueError("Cannot take a larger sample than population when replace is False")
        if chances is not None and np.count_nonzero(chances) < wanted:
            raise ValueError("Fewer non-zero entries in p than size")
        order = self._feed.bare(self._take("order", count, () if chances is None else (chances,)))
        return self._feed.held(order[:wanted].reshape(_shape(size)), scalar=size is None)

    def _chances(self, p: Any, count: int) -> Any:
        if isinstance(p, Wrapped):
            self._feed.remark("p of choice is of the state: the draw is computed in float64 from its values")
        chances = np.asarray(self._feed.bare(p), np.float64)
        if chances.shape != (count,) or np.any(~(chances >= 0)) or not chances.any():
            raise ValueError("'a' and 'p' must have same size, and 'p' must not be negative")
        return chances

    def _entries(self, table: Any, places: Any, axis: int = 0) -> Any:
        """Return slices of an array along an axis, which may be of the state."""
        where = self._feed.bare(places)
        return self._feed.constants(table[where] if axis == 0 else np.take(table, where, axis=axis))

    def _vectors(self, name: str, shape: tuple[int, ...], before: tuple[Any, ...], together: Any) -> Any:
        """Return draws whose last axis is that of the one-dimensional parameter `together`."""
        if np.ndim(together) != 1 or not np.size(together):
            raise self._feed.fault(f"{name} takes one row of parameters; accepted: an array of one dimension")
        upright = np.reshape(together, (-1,) + (1,) * len(shape))
        drawn = self._feed.bare(self._take(name, (np.size(together), *shape), (*before, upright)))
        return self._feed.held(np.ascontiguousarray(np.moveaxis(drawn, 0, -1)), scalar=False)

    def _factor(self, matrix: Any, method: str, check_valid: str, tol: float) -> Any:
        """Return what a row of normals is multiplied with, by NumPy's method for it."""
        if method not in {"cholesky", "eigh", "svd"}:
            raise ValueError("method must be one of {'eigh', 'svd', 'cholesky'}")
        if check_valid not in {"warn", "raise", "ignore"}:
            raise ValueError("check_valid must equal 'warn', 'raise', or 'ignore'")
        if method == "cholesky":
            return np.linalg.cholesky(matrix).T
        if method == "eigh":
            scales, columns = np.linalg.eigh(matrix)
            is_valid = not np.any(scales < -tol)
        else:
            columns, scales, rows = np.linalg.svd(matrix)
            is_valid = np.allclose(np.dot(rows.T * scales, rows), matrix, rtol=tol, atol=tol)
        if not is_valid and check_valid == "raise":
            raise ValueError("covariance is not symmetric positive-semidefinite.")
        if not is_valid and check_valid == "warn" and self._feed.setting is None:  # once is enough
            warnings.warn("covariance is not symmetric positive-semidefinite.", RuntimeWarning, stacklevel=3)
        if self._plain is np.random.RandomState:
            return np.sqrt(scales)[:, None] * rows
        return (columns * np.sqrt(np.abs(scales))).T


def _shape(size: Any) -> tuple[int, ...]:
    if size is None:
        return ()
    return tuple(map(operator.index, size)) if np.iterable(size) else (operator.index(size),)
