"""NumPy's classes and objects that make or walk arrays: r_, c_, fromiter, ndenumerate and vectorize, on the state.

With plain arguments alone they are NumPy's own.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterable, Iterator
from typing import Any

import numpy as np

from narrowgauge.dispatch.exact import bare
from narrowgauge.dispatch.scalar import State
from narrowgauge.dispatch.setting import Number, Setting, Wrapped, holds
from narrowgauge.errors import RefusedError

__all__ = ["builders"]


def builders(setting: Setting, array: Callable[..., Any]) -> dict[str, Any]:
    """Return the stand-ins by name; `array` is what stands for np.array."""

    def fromiter(iterable: Iterable[Any], dtype: Any, count: int = -1, **others: Any) -> Any:
        values = list(iterable if count < 0 else itertools.islice(iterable, count))
        if not holds(values, Wrapped):
            return np.fromiter(values, dtype, count, **others)
        if len(values) < count:
            raise ValueError(f"iterator too short: Expected {count} but iterator had only {len(values)} items.")
        return array(values, dtype, **others)

    def ndenumerate(arr: Any) -> Iterator[tuple[tuple[int, ...], Any]]:
        if not holds(arr, Wrapped):
            return np.ndenumerate(arr)
        own = array(arr, copy=None)
        return zip(np.ndindex(own.shape), own.ravel(), strict=True)

    return {
        "c_": _Joining(np.c_, setting, array, axes=2),
        "fromiter": fromiter,
        "ndenumerate": ndenumerate,
        "r_": _Joining(np.r_, setting, array, axes=1),
        "vectorize": _vectorizing(setting, array),
    }


class _Joining:
    """What is indexed with arrays and numbers to join them: np.r_ along the first axis, np.c_ as columns."""

    def __init__(self, plain: Any, setting: Setting, array: Callable[..., Any], *, axes: int) -> None:
        self._plain, self._setting, self._array, self._axes = plain, setting, array, axes

    @property  # type: ignore[misc]  # isinstance() must decide as it does in plain code
    def __class__(self) -> Any:
        return type(self._plain)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._plain, name)

    def __getitem__(self, key: Any) -> Any:
        items = key if isinstance(key, tuple) else (key,)
        bounds = [bound for item in items if isinstance(item, slice) for bound in (item.start, item.stop, item.step)]
        if not holds([*items, *bounds], Wrapped):
            return self._plain[key]
        name = "np.r_" if self._axes == 1 else "np.c_"
        if holds(bounds, Wrapped) or any(isinstance(item, str) for item in items):
            what = "a text or a bound of the state among the arrays"
            raise self._setting.fault(RefusedError, f"{name} with {what} is refused; accepted: np.concatenate")
        return np.concatenate([self._part(item) for item in items], axis=0 if self._axes == 1 else -1)

    def _part(self, item: Any) -> Any:
        if isinstance(item, slice):
            return self._plain[item]
        made = self._array(item, copy=None)
        if made.ndim >= self._axes:
            return made
        return made.reshape((-1, 1)[: self._axes])  # one axis becomes a column of np.c_, none a single place


def _vectorizing(setting: Setting, array: Callable[..., Any]) -> type:
    """Return the stand-in for np.vectorize, which calls its function element by element on values of the state."""

    class Vectorize(np.vectorize):
        """np.vectorize whose results, of elements of the state, are an array of the state."""

        def _vectorize_call(self, func: Callable[..., Any], args: Any) -> Any:  # what NumPy's own __call__ ends in
            if not holds(list(args), Wrapped):
                return super()._vectorize_call(func, args)  # type: ignore[misc]  # NumPy's stubs leave it out
            if self.signature is not None:
                raise setting.fault(RefusedError, "signature= of np.vectorize on the state; accepted: a loop")
            return _elementwise(self, func, [array(value, copy=None) for value in args])

    def _elementwise(maker: Any, function: Callable[..., Any], arguments: list[Any]) -> Any:
        shape = np.broadcast_shapes(*(value.shape for value in arguments))
        columns = [np.broadcast_to(value, shape).ravel().tolist() for value in arguments]
        rows = list(zip(*columns, strict=True))
        kinds = maker.otypes
        if kinds is None and not rows:
            raise ValueError("cannot call `vectorize` on size 0 inputs unless `otypes` is set")
        found = [function(*row) for row in rows[:1]] if kinds is None else []
        several = isinstance(found[0], tuple) if found else len(kinds) > 1
        if kinds is None:  # as NumPy: the first result decides the types, and is computed once more without cache=
            firsts = found[0] if several else (found[0],)
            kinds = [_kind(first, setting) for first in firsts]
            if not maker.cache:
                found = []
        found += [function(*row) for row in rows[len(found) :]]
        parts = list(zip(*found, strict=True)) if several else [found]
        made = [_made(list(part), kind).reshape(shape) for part, kind in zip(parts, kinds, strict=True)]
        return tuple(made) if several else made[0]

    def _made(values: list[Any], kind: Any) -> Any:
        if setting.float_dtype(kind) is None and holds(values, Number):
            return array(values).astype(kind)
        return array(values, kind)

    return Vectorize


def _kind(value: Any, setting: Setting) -> np.dtype[Any]:
    """Return the type that NumPy gives an array of such values."""
    return value.dtype if isinstance(value, State) else np.asarray(bare(value, setting)).dtype
