"""NumPy's functions and ufuncs as a copy meets them: a list or tuple of values of the state becomes an array first.

NumPy asks only an argument itself whether it has operations of its own, not what a list holds, and would ask each
value for a plain number. All else is handed on as it is, so that NumPy's protocols decide. A function that takes a
sequence of arrays (`concatenate`) gets a sequence, each of its items made an array where that is a list.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterable
from types import MethodType, ModuleType
from typing import Any

import numpy as np

from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.functions import row_for
from narrowgauge.dispatch.namespaces import Exchanging
from narrowgauge.dispatch.rows import Row
from narrowgauge.dispatch.scalar import Scalar
from narrowgauge.dispatch.setting import Wrapped, holds
from narrowgauge.dispatch.tables import WRITING

__all__ = ["taking_lists"]

_FUNCTION = type(np.sum)
_LISTS = (list, tuple, deque)
# arguments that are sequences of arrays, or of bounds, and no arrays themselves
_OF_ARRAYS = frozenset("arrays bins choicelist choices keys multi_index range sample tup".split())  # noqa: SIM905
# a list means something else to them than an array does: a type, a place in a nest, or what is given back as a list
_FOR_LISTS = frozenset({"numpy.block", "numpy.can_cast", "numpy.result_type", "numpy.trim_zeros"})
_MODULES = ("fft", "linalg")


def taking_lists(array: Callable[[Any], Any]) -> Callable[[str, Any], Any]:
    """Return what exchanges a name of numpy for its stand-in, each one made once; `array` makes an array of a list."""
    known: dict[Any, Any] = {}  # np.abs and np.absolute are one

    def exchange(name: str, value: Any) -> Any:
        if isinstance(value, ModuleType):
            return Exchanging(value, exchange) if name in _MODULES else value
        if isinstance(value, np.ufunc):
            return known.setdefault(value, _Ufunc(value, array))
        row = row_for(value) if type(value) is _FUNCTION else None
        if row is None or row.reason or row.name in _FOR_LISTS | WRITING:
            return value
        return known.setdefault(value, _Function(value, array, row))

    return exchange


class _Plain:
    """What stands for one of NumPy's functions: equal to it, and whatever is asked of it is answered by it."""

    __slots__ = ("_array", "_plain")

    def __init__(self, plain: Any, array: Callable[[Any], Any]) -> None:
        self._plain, self._array = plain, array

    @property  # type: ignore[misc]  # isinstance() must decide as it does in plain code
    def __class__(self) -> Any:
        return type(self._plain)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._plain, name)

    def __eq__(self, other: object) -> bool:
        return self._plain is (other._plain if isinstance(other, _Plain) else other)

    def __hash__(self) -> int:
        return hash(self._plain)

    def __repr__(self) -> str:
        return repr(self._plain)

    def __copy__(self) -> Any:
        return self

    def __deepcopy__(self, memo: object) -> Any:
        return self

    def __reduce_ex__(self, protocol: Any) -> Any:
        return _same, (self._plain,)


def _same(plain: Any) -> Any:
    """Return what was pickled: by its name, NumPy's own."""
    return plain


class _Ufunc(_Plain):
    """Stands for a ufunc."""

    __slots__ = ()

    def __call__(self, *inputs: Any, **keywords: Any) -> Any:
        for value in inputs:
            kind = type(value)
            if kind is list or kind is tuple or kind is deque:
                inputs = self._opened(inputs, range(self._plain.nin))
                break
        if inputs and not keywords and len(inputs) == self._plain.nin:
            first = inputs[0]
            if type(first) is Array or type(first) is Scalar:  # whom NumPy would ask first, asked at once
                found = first.__array_ufunc__(self._plain, "__call__", *inputs)
                if found is not NotImplemented:
                    return found
        return self._plain(*inputs, **keywords)

    def reduce(self, *inputs: Any, **keywords: Any) -> Any:
        """As the ufunc's own, also of a list."""
        return self._plain.reduce(*self._opened(inputs, (0,)), **keywords)

    def accumulate(self, *inputs: Any, **keywords: Any) -> Any:
        """As the ufunc's own, also of a list."""
        return self._plain.accumulate(*self._opened(inputs, (0,)), **keywords)

    def reduceat(self, *inputs: Any, **keywords: Any) -> Any:
        """As the ufunc's own, also of a list."""
        return self._plain.reduceat(*self._opened(inputs, (0,)), **keywords)

    def outer(self, *inputs: Any, **keywords: Any) -> Any:
        """As the ufunc's own, also of lists."""
        return self._plain.outer(*self._opened(inputs, (0, 1)), **keywords)

    def at(self, *inputs: Any, **keywords: Any) -> Any:
        """As the ufunc's own, also with a list of increments."""
        return self._plain.at(*self._opened(inputs, (2,)), **keywords)

    def _opened(self, inputs: tuple[Any, ...], places: Iterable[int]) -> tuple[Any, ...]:
        made = list(inputs)
        for place in places:
            if place < len(made):
                made[place] = _opened(made[place], self._array)
        return tuple(made)


class _Function(_Plain):
    """Stands for a function that has a row: the arguments that may be of the state may be lists of it."""

    __slots__ = ("_joins", "_row")

    def __init__(self, plain: Any, array: Callable[[Any], Any], row: Row) -> None:
        super().__init__(plain, array)
        self._row = row
        self._joins = row.state <= _OF_ARRAYS

    def __get__(self, instance: Any, owner: Any = None) -> Any:
        return self if instance is None else MethodType(self, instance)

    def __call__(self, *arguments: Any, **keywords: Any) -> Any:
        given = (*arguments, *keywords.values()) if keywords else arguments
        listed = False
        for value in given:
            kind = type(value)
            if issubclass(kind, Wrapped):  # NumPy asks that one, and its row knows lists
                return self._plain(*arguments, **keywords)
            listed = listed or issubclass(kind, _LISTS)
        if not listed or (self._joins and not any(map(_is_nested, given))):
            return self._plain(*arguments, **keywords)
        row = self._row
        names = (row.variadic,) * len(arguments) if row.variadic else row.placed
        placed = [self._given(name, value) for name, value in zip(names, arguments, strict=False)]
        named = {name: self._given(name, value) for name, value in keywords.items()}
        return self._plain(*placed, *arguments[len(placed) :], **named)

    def _given(self, name: str | None, value: Any) -> Any:
        if name not in self._row.state and name != self._row.variadic:
            return value
        if name in _OF_ARRAYS and isinstance(value, (list, tuple)):
            items = [_opened(item, self._array) for item in value]
            return items if isinstance(value, list) else tuple(items)
        return _opened(value, self._array)


def _is_nested(value: Any) -> bool:
    """Whether a value is a list with a list in it."""
    return issubclass(type(value), _LISTS) and any(issubclass(type(item), _LISTS) for item in value)


def _opened(value: Any, array: Callable[[Any], Any]) -> Any:
    """Return a list, tuple or deque that holds values of the state as an array, anything else as it is."""
    items = list(value) if isinstance(value, deque) else value
    return array(items) if isinstance(items, (list, tuple)) and holds(items, Wrapped) else value
