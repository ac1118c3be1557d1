"""Functions that numba compiled: machine code knows neither the array nor the rounding, so their Python original runs.

The decorators of the stand-in give the function that they are put on; `vectorize` and `guvectorize` call it element by
element. What is met compiled already is exchanged where its original belongs to a listed module, and else refuses the
state.
"""

from __future__ import annotations

import builtins
import sys
from collections.abc import Callable, Sequence
from types import FunctionType, ModuleType
from typing import Any

import numpy as np

from narrowgauge.dispatch.namespaces import Namespace
from narrowgauge.dispatch.setting import Setting, Wrapped, holds
from narrowgauge.errors import RefusedError

__all__ = ["exchanged_compiled", "exchanged_module", "is_compiled", "numba_namespace"]


def is_compiled(value: Any) -> bool:
    """Whether a value is a function that numba made of a Python function."""
    return type(value).__module__.partition(".")[0] == "numba" and callable(value) and hasattr(value, "py_func")


def exchanged_compiled(value: Any, setting: Setting | None, counterpart: Callable[[Any], Any]) -> Any:
    """Return what stands for a compiled function: the copy that `counterpart` knows of its original, or a guard."""
    return counterpart(value.py_func) or (value if setting is None else _Guarded(value, setting))


def exchanged_module(module: Any, setting: Setting | None, counterpart: Callable[[Any], Any]) -> Any:
    """Return a real module, or a stand-in for it in which compiled functions are exchanged, if it holds any."""
    if "numba" not in sys.modules or not isinstance(module, ModuleType):
        return module
    found = {name: value for name, value in vars(module).items() if is_compiled(value)}
    if not found:
        return module
    names = {name: exchanged_compiled(value, setting, counterpart) for name, value in found.items()}
    return Namespace(module, names)


class _Guarded:
    """A compiled function without a copy of its original; it refuses the state and runs on anything else."""

    def __init__(self, plain: Any, setting: Setting) -> None:
        self._plain, self._setting = plain, setting

    def __call__(self, *arguments: Any, **keywords: Any) -> Any:
        if holds([*arguments, keywords], Wrapped):
            original = self._plain.py_func
            raise self._setting.fault(
                RefusedError,
                f"{original.__module__}.{original.__qualname__} is compiled by numba and cannot round the state. "
                f'Accepted: "{original.__module__}" in kernel.modules, so that its Python original runs',
            )
        return self._plain(*arguments, **keywords)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._plain, name)


def numba_namespace(
    numpy: ModuleType | None, note: Callable[[str], None], imported: Callable[[str], ModuleType]
) -> ModuleType:
    """Return a stand-in for `numba` that leaves functions as they are; `note` is told of each one.

    `numpy` is the stand-in that the copies meet, or None for NumPy itself; `imported` imports a module for real.
    Raises ImportError without numba.
    """
    plain = imported("numba")
    make: Any = np if numpy is None else numpy

    def told(function: Any) -> Any:
        if isinstance(function, FunctionType):
            note(f"{function.__module__}.{function.__qualname__}")
            if getattr(function, "__builtins__", {}).get("__import__") is not builtins.__import__:
                function.py_func = function  # type: ignore[attr-defined]  # as on what numba gives, if it is a copy
        return function

    def jit(first: Any = None, *further: Any, **options: Any) -> Any:
        return told(first) if isinstance(first, FunctionType) else told

    def vectorize(first: Any = None, **options: Any) -> Any:
        def decorate(function: Any) -> Any:
            return _elementwise(told(function), make)

        return decorate(first) if isinstance(first, FunctionType) else decorate

    def guvectorize(first: Any, layout: str | None = None, **options: Any) -> Any:
        words = first if layout is None else layout
        return lambda function: _by_slices(told(function), words, make)

    def jitclass(first: Any = None, **options: Any) -> Any:
        return first if isinstance(first, type) else lambda cls: cls

    def experimental() -> ModuleType:
        return Namespace(imported("numba.experimental"), {"jitclass": jitclass})

    names = {"jit": jit, "njit": jit, "prange": range, "vectorize": vectorize, "guvectorize": guvectorize}
    return Namespace(plain, names, {"experimental": experimental})


def _elementwise(function: Callable[..., Any], numpy: Any) -> Callable[..., Any]:
    """Return a function of arrays that calls one of scalars for each element, after broadcasting."""

    def vectorized(*arguments: Any) -> Any:
        shape = np.broadcast_shapes(*map(np.shape, arguments))
        if not shape:
            return function(*arguments)
        columns = [np.broadcast_to(_as_array(argument, numpy), shape).ravel() for argument in arguments]
        return numpy.array([function(*values) for values in zip(*columns, strict=True)]).reshape(shape)

    vectorized.__name__, vectorized.__qualname__ = function.__name__, function.__qualname__
    vectorized.py_func = function  # type: ignore[attr-defined]
    return vectorized


def _by_slices(function: Callable[..., Any], layout: str, numpy: Any) -> Callable[..., Any]:
    """Return a generalized ufunc of a function that writes its results into its last arguments.

    `layout` is its signature in NumPy's notation, such as "(n),(m)->(n)"; a result of "()" is written to place 0.
    """
    inner, outer = (_axes(half) for half in layout.replace(" ", "").split("->"))

    def generalized(*arguments: Any) -> Any:
        inputs = [_as_array(argument, numpy) for argument in arguments[: len(inner)]]
        lengths = {"": 1}  # of a result that is a scalar
        loops = []
        for value, axes in zip(inputs, inner, strict=True):
            cut = len(value.shape) - len(axes)
            lengths |= zip(axes, value.shape[cut:], strict=True)
            loops.append(value.shape[:cut])
        loop = np.broadcast_shapes(*loops)
        spread = [
            np.broadcast_to(value, loop + value.shape[len(own) :]) for value, own in zip(inputs, loops, strict=True)
        ]
        given = arguments[len(inner) :]
        made = [] if given else [numpy.empty(loop + tuple(lengths[a] for a in axes or ("",))) for axes in outer]
        results = list(given) or made
        for place in np.ndindex(loop):
            function(*(value[place] for value in spread), *(result[place] for result in results))
        results = list(given) or [result if axes else result[..., 0] for result, axes in zip(made, outer, strict=True)]
        return results[0] if len(results) == 1 else tuple(results)

    return generalized


def _axes(half: str) -> list[Sequence[str]]:
    """Return the names of the axes of each argument in one half of a layout."""
    return [[axis for axis in part.strip("()").split(",") if axis] for part in half.replace("),(", ")|(").split("|")]


def _as_array(value: Any, numpy: Any) -> Any:
    return value if isinstance(value, np.ndarray) else numpy.asarray(value)
