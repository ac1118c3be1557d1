"""Operators and ufuncs of arrays by the shortest way: for arrays of one run and plain numbers, where nobody observes.

Dispatch costs as much as the operation on a few thousand values. `Arithmetic.direct` computes and rounds in one call;
everything that it does not hold, and every other operand, goes through `Setting.operate`, with the same bits.
"""

from __future__ import annotations

import operator
from collections.abc import Callable
from typing import Any, TypeVar

import numpy as np

from narrowgauge.dispatch.routes import ROUTES
from narrowgauge.dispatch.scalar import Scalar, State

__all__ = ["with_shortcuts"]

Method = Callable[..., Any]
Kind = TypeVar("Kind", bound=type[State])

_NUMBERS = frozenset((float, int, np.float64))
_BINARY = {
    "__add__": np.add, "__sub__": np.subtract, "__mul__": np.multiply, "__truediv__": np.divide,
    "__lt__": np.less, "__le__": np.less_equal, "__gt__": np.greater, "__ge__": np.greater_equal,
}  # fmt: skip
_REFLECTED = {
    "__radd__": np.add, "__rsub__": np.subtract, "__rmul__": np.multiply, "__rtruediv__": np.divide
}  # fmt: skip
_IN_PLACE: dict[str, tuple[np.ufunc, Method]] = {
    "__iadd__": (np.add, operator.iadd),
    "__isub__": (np.subtract, operator.isub),
    "__imul__": (np.multiply, operator.imul),
    "__itruediv__": (np.divide, operator.itruediv),
    "__ifloordiv__": (np.floor_divide, operator.ifloordiv),
    "__imod__": (np.remainder, operator.imod),
    "__ipow__": (np.power, operator.ipow),
}


def with_shortcuts(array: Kind) -> Kind:
    """Give the class of arrays its operators and its `__array_ufunc__`."""
    made: dict[str, Method] = {name: _binary(array, ufunc, getattr(State, name)) for name, ufunc in _BINARY.items()}
    made |= {name: _reflected(array, ufunc, getattr(State, name)) for name, ufunc in _REFLECTED.items()}
    made |= {name: _in_place(array, *row) for name, row in _IN_PLACE.items()}
    for name, method in (made | {"__pow__": _power, "__array_ufunc__": _ufunc(array)}).items():
        setattr(array, name, method)
    return array


def _binary(array: type, ufunc: np.ufunc, general: Method) -> Method:
    """Return the method of an operator; `general` is what serves other operands."""
    states, new = frozenset((array, Scalar)), object.__new__

    def method(self: Any, other: Any) -> Any:
        setting = self._setting
        compute = setting.direct.get(ufunc)
        if compute is None:
            return general(self, other)
        kind = type(other)
        if kind in states and other._setting is setting:
            result = compute(self._carrier, other._carrier)
        elif kind in _NUMBERS:
            result = compute(self._carrier, setting.arithmetic.weak(other))
        else:
            return general(self, other)
        if type(result) is not np.ndarray or result.dtype.kind != "f":
            return setting.wrap(result)
        made: Any = new(array)
        made._carrier, made._setting = result, setting
        return made

    return method


def _reflected(array: type, ufunc: np.ufunc, general: Method) -> Method:
    """Return the method of a reflected operator: the other operand is no array of the state."""
    new = object.__new__

    def method(self: Any, other: Any) -> Any:
        setting = self._setting
        compute = setting.direct.get(ufunc)
        if compute is None or type(other) not in _NUMBERS:
            return general(self, other)
        result = compute(setting.arithmetic.weak(other), self._carrier)
        if type(result) is not np.ndarray or result.dtype.kind != "f":
            return setting.wrap(result)
        made: Any = new(array)
        made._carrier, made._setting = result, setting
        return made

    return method


def _in_place(array: type, ufunc: np.ufunc, call: Method) -> Method:
    """Return the method of an in-place operator."""
    states, route = frozenset((array, Scalar)), ROUTES[ufunc]
    short = ufunc is not np.power  # whose operator has shortcuts of its own for numbers

    def method(self: Any, other: Any) -> Any:
        setting = self._setting
        compute, kind = setting.direct.get(ufunc) if short else None, type(other)
        if compute is not None and kind in states and other._setting is setting:
            compute(self._carrier, other._carrier, out=self._carrier)
        elif compute is not None and kind in _NUMBERS:
            compute(self._carrier, setting.arithmetic.weak(other), out=self._carrier)
        elif setting.operate(ufunc, route, (self, other), out=self._carrier, call=call) is NotImplemented:
            return NotImplemented
        return self

    return method


def _power(self: Any, exponent: Any) -> Any:
    """Square where the exponent is 2, as NumPy does: its one rounding is that of the power."""
    square = self._setting.direct.get(np.square)
    if square is not None and type(exponent) in _NUMBERS and exponent == 2:
        return self._setting.wrap(square(self._carrier))
    return State.__pow__(self, exponent)


def _ufunc(array: Any) -> Method:
    """Return the method that NumPy calls for a ufunc on arrays."""

    def called(self: Any, ufunc: np.ufunc, method: str, *inputs: Any, **keywords: Any) -> Any:
        setting = self._setting
        compute = setting.direct.get(ufunc) if method == "__call__" else None
        if compute is None:
            return setting.ufunc(setting, ufunc, method, inputs, keywords)
        carriers, arrays = [], False
        for value in inputs:
            kind = type(value)
            if kind is array and value._setting is setting:
                carriers.append(value._carrier)
                arrays = True
            elif kind in _NUMBERS:
                carriers.append(setting.arithmetic.weak(value))
            else:
                return setting.ufunc(setting, ufunc, method, inputs, keywords)
        if arrays and not keywords:
            return setting.wrap(compute(*carriers))
        target: Any = keywords["out"][0] if arrays and keywords.keys() == {"out"} else None
        if type(target) is not array or target._setting is not setting:
            return setting.ufunc(setting, ufunc, method, inputs, keywords)
        compute(*carriers, out=target._carrier)
        return target

    return called
