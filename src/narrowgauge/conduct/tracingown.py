"""A trace of a function that rounds for itself: arrays that tell what NumPy does with them.

There is no duck array where a kernel is called with plain arrays of its format. For the one run that looks for a
difference it is called with a subclass of ndarray, which hands every operation to NumPy as plain arrays of the same
memory and tells the trace; the bits are those of the run without. A subclass can be lost on the way (a list of
numbers, a buffer that an unlisted module makes): what is computed then is not seen, and the trace says where it comes
back.
"""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from functools import partial
from inspect import unwrap
from types import FrameType, ModuleType
from typing import Any

import numpy as np

from narrowgauge.conduct.tracing import Kept, Trace
from narrowgauge.dispatch.copies import PrivateCopy
from narrowgauge.dispatch.setting import Place

__all__ = ["run_traced"]

_METHODS = (
    "argmax", "argmin", "argsort", "astype", "clip", "compress", "cumprod", "cumsum", "dot", "max", "mean", "min",
    "prod", "repeat", "round", "searchsorted", "std", "sum", "take", "trace", "var",
)  # fmt: skip
_CONVERTERS = ("array", "asanyarray", "asarray", "ascontiguousarray", "asfortranarray")
_MAKERS = (*_CONVERTERS, "arange", "empty", "eye", "full", "geomspace", "identity", "linspace", "ones", "zeros")


def run_traced(copy: PrivateCopy, draws: Any, *further: Any, trace: Trace, **keywords: Any) -> Any:
    """Return what `copy.function(draws, *further, **keywords)` returns, as plain arrays, and trace the call.

    `copy` is a fresh one that rounds for itself (`own_copy`); its modules' names for NumPy are exchanged during the
    call, and a place is the innermost line of its modules. `draws` are an array of the kernel's own type in any memory
    layout, which is kept as it is, or a tuple of them; they are told to the trace, `gave` is left to the caller.
    """
    modules = [] if copy.copies is None else copy.copies.modules.values()
    function = unwrap(copy.function)
    namespaces = [getattr(function, "__globals__", {}), *map(vars, modules)]
    files = {str(space["__file__"]) for space in namespaces if space.get("__file__")}
    code = getattr(function, "__code__", None)
    watch = _Watch(trace, files if code is None else files | {code.co_filename})
    for array in _numbers(draws):
        trace.draws(array)
    with np.errstate(all="ignore"), _exchanged(namespaces, watch):
        return _plain(copy.function(watch.wrapped(draws), *further, **keywords))


class _Watch:
    """What the traced arrays of one run tell: its trace, places in the user's files, and the class of its arrays."""

    def __init__(self, trace: Trace, files: set[str]) -> None:
        self.trace = trace
        self.files = files
        self.kind: type[_Traced] = type("Traced", (_Traced,), {"watch": self})

    def where(self) -> Place | None:
        """Return the innermost line of the user's files that is being executed."""
        frame: FrameType | None = sys._getframe(1)
        while frame is not None and frame.f_code.co_filename not in self.files:
            frame = frame.f_back
        return None if frame is None else Place(frame.f_code.co_filename, frame.f_lineno)

    def kept(self, operand: Any) -> Kept | None:
        """Keep an operand before it can be overwritten, and note whether it was made out of sight."""
        trace = self.trace
        kept = None if trace.full else trace.keep(operand)
        if kept is not None and trace.lost is None and type(operand) is np.ndarray and trace.varies(kept):
            known = trace.made.keys() | trace.draws_keys | trace.constants
            if not any(known >= set(reading) for reading in kept.readings):
                trace.lost = self.where(), len(trace.operations)
        return kept

    def note(
        self, name: str, operands: Sequence[Kept | None], result: Any, call: Callable[..., Any] | None = None
    ) -> None:
        """Keep one operation."""
        if not self.trace.full:
            self.trace.add(self.where(), name, operands, _plain(result), call)

    def wrapped(self, result: Any) -> Any:
        """Return plain arrays, also in a nest of tuples and lists, as traced ones of the same memory."""
        return _mapped(result, lambda value: value.view(self.kind) if type(value) is np.ndarray else value)

    def call(self, name: str, function: Callable[..., Any], arguments: Sequence[Any], keywords: dict[str, Any]) -> Any:
        """Run one of NumPy's functions on plain arrays, and keep it as one operation."""
        read = {key: value for key, value in keywords.items() if key != "out"}
        operands = [self.kept(value) for value in _numbers((arguments, read))]
        result = function(*_plain(arguments), **_plain(keywords))
        self.note(name, operands, result, _again(function, arguments, read))
        for value in _numbers((arguments, keywords)):
            if isinstance(value, _Traced) and isinstance(result, np.ndarray) and _is_view(value, result):
                return value  # an out=, or what needed no conversion
        return self.wrapped(result)

    def made(self, name: str, *arguments: Any, **keywords: Any) -> Any:
        """Run one of NumPy's functions that make arrays; what they make of plain numbers are constants."""
        function = getattr(np, name)
        given = list(_numbers((arguments, keywords)))
        if any(isinstance(value, _Traced) for value in given):
            return self.call(name, function, arguments, keywords)
        result, trace = function(*arguments, **keywords), self.trace
        if name != "empty" and not trace.full:
            kept = self.kept(result) if name in _CONVERTERS else trace.keep(result)
            if kept is not None and not (name in _CONVERTERS and trace.varies(kept)):
                trace.constants.update(*kept.readings)
        return self.wrapped(result)


class _Traced(np.ndarray[Any, Any]):
    """An array that hands every operation on it to NumPy as a plain array, and tells the watch."""

    watch: _Watch

    def __array_ufunc__(
        self, ufunc: np.ufunc, method: Any, *inputs: Any, out: tuple[Any, ...] = (), **keywords: Any
    ) -> Any:
        watch, called = self.watch, method == "__call__"
        operands = [watch.kept(value) for value in (_as_taken(ufunc, inputs) if called else inputs)]
        function, further = getattr(ufunc, method), _plain(keywords)
        result = function(*_plain(inputs), **({"out": _plain(out)} if out else {}), **further)
        if method == "at":
            result = inputs[0]
        repeat = (lambda *values: function(*values, **further)) if called and "where" not in keywords else None
        watch.note(ufunc.__name__ if called else f"{ufunc.__name__}.{method}", operands, result, repeat)
        if method == "at":
            return None
        if not out:
            return watch.wrapped(result)
        results = result if isinstance(result, tuple) else (result,)
        delivered = [watch.wrapped(got) if into is None else into for got, into in zip(results, out, strict=True)]
        return delivered[0] if len(delivered) == 1 else tuple(delivered)

    def __array_function__(self, function: Any, types: Any, arguments: Any, keywords: Any) -> Any:
        return self.watch.call(function.__name__, function, arguments, keywords)


def _method(name: str) -> Callable[..., Any]:
    plainly = getattr(np.ndarray, name)

    def method(self: _Traced, *arguments: Any, **keywords: Any) -> Any:
        return self.watch.call(name, plainly, (self, *arguments), keywords)

    return method


for _name in _METHODS:
    setattr(_Traced, _name, _method(_name))


class _Numpy(ModuleType):
    """NumPy under the names of the user's module: what it makes is traced, everything else is NumPy's own."""

    def __init__(self, numpy: ModuleType, makers: Mapping[str, Callable[..., Any]]) -> None:
        super().__init__(numpy.__name__)
        vars(self).update(makers, _numpy=numpy)

    def __getattr__(self, name: str) -> Any:
        return getattr(vars(self)["_numpy"], name)


@contextmanager
def _exchanged(namespaces: Sequence[dict[str, Any]], watch: _Watch) -> Iterator[None]:
    """Exchange NumPy, and its functions that make arrays, under every name in some namespaces."""
    makers = {name: partial(watch.made, name) for name in _MAKERS}
    functions = {id(getattr(np, name)): maker for name, maker in makers.items()}
    before: list[tuple[dict[str, Any], str, Any]] = []
    for space in namespaces:
        for name, value in list(space.items()):
            # a private copy has a module of its own for NumPy
            is_numpy = isinstance(value, ModuleType) and value.__name__ == "numpy"
            if is_numpy or id(value) in functions:
                before.append((space, name, value))
                space[name] = _Numpy(value, makers) if is_numpy else functions[id(value)]
    try:
        yield
    finally:
        for space, name, value in before:
            space[name] = value


def _as_taken(ufunc: np.ufunc, inputs: Sequence[Any]) -> Sequence[Any]:
    """Return operands with Python's numbers in the type in which the ufunc takes them."""
    weak = [type(value) in (int, float) for value in inputs]
    if not any(weak):
        return inputs
    types = [type(value) if is_weak else np.asarray(value).dtype for value, is_weak in zip(inputs, weak, strict=True)]
    try:
        taken = ufunc.resolve_dtypes((*types, *(None for _ in range(ufunc.nout))))
        pairs = zip(inputs, weak, taken, strict=False)
        return [np.asarray(value, dtype) if is_weak else value for value, is_weak, dtype in pairs]
    except (TypeError, ValueError, OverflowError):  # the ufunc says so itself
        return inputs


def _again(function: Callable[..., Any], arguments: Sequence[Any], keywords: Mapping[str, Any]) -> Callable[..., Any]:
    """Return what calls a function again with other numbers in the places of those that it got."""

    def again(*operands: Any) -> Any:
        given = iter(operands)
        own, named = _mapped(
            (tuple(arguments), dict(keywords)), lambda value: next(given) if _is_number(value) else value
        )
        return function(*own, **named)

    return again


def _mapped(nest: Any, change: Callable[[Any], Any]) -> Any:
    """Return a nest of lists, tuples and mappings with every other value in it changed."""
    if isinstance(nest, Mapping):
        return {key: _mapped(value, change) for key, value in nest.items()}
    if isinstance(nest, (list, tuple)):
        items = [_mapped(item, change) for item in nest]
        if isinstance(nest, list):
            return items
        return nest._make(items) if hasattr(nest, "_make") else tuple(items)
    return change(nest)


def _plain(nest: Any) -> Any:
    return _mapped(nest, lambda value: value.view(np.ndarray) if isinstance(value, _Traced) else value)


def _numbers(nest: Any) -> list[Any]:
    """Return the arrays and floats in a nest, in order; integers are axes and lengths."""
    found: list[Any] = []
    _mapped(nest, lambda value: found.append(value) if _is_number(value) else None)
    return found


def _is_number(value: Any) -> bool:
    return isinstance(value, (np.ndarray, np.generic, float))


def _is_view(one: np.ndarray[Any, Any], other: np.ndarray[Any, Any]) -> bool:
    """Whether two arrays are the same values in the same memory."""
    if (one.dtype, one.shape, one.strides) != (other.dtype, other.shape, other.strides):
        return False
    return bool(one.__array_interface__["data"] == other.__array_interface__["data"])
