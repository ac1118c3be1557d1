"""Stand-ins for NumPy's Generator and RandomState, which draw from the tape of the run."""

from __future__ import annotations

from typing import Any

import numpy as np

from narrowgauge.dispatch.distributions import REFUSED, Draws
from narrowgauge.dispatch.feed import Line, family_of
from narrowgauge.dispatch.joint import JointDraws

__all__ = ["REFUSED", "Draws", "GeneratorDraws", "RandomStateDraws"]


class GeneratorDraws(JointDraws):
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

    def permuted(self, x: Any, *, axis: int | None = None, out: Any = None) -> Any:
        """Return x with each of its rows along an axis, or all of it, in an order of its own."""
        plain = np.asarray(self._feed.bare(x)) if isinstance(x, (list, tuple)) else x
        lines = np.reshape(plain, -1) if axis is None else np.moveaxis(plain, axis, 0)
        order = self._feed.bare(self._take("order", lines.shape))
        moved = np.take_along_axis(lines, order, 0)
        result = np.reshape(moved, plain.shape) if axis is None else np.moveaxis(moved, 0, axis)
        if out is None:
            return self._feed.constants(result)
        out[...] = result
        return out

    def spawn(self, n_children: int) -> list[Any]:
        """Return generators whose numbers are their own: further ones of the same tape."""
        return [self._on(self._feed.line()) for _ in range(n_children)]


class RandomStateDraws(JointDraws):
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
