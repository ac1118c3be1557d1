"""Python's operators on the state, and the 0-d value: immutable, without length or items.

It holds a scalar exactly as plain code would hold one (a NumPy scalar, or a Python float out of `math`) and applies
Python's operators to it. A mutable 0-d value would make `x += dx; path.append(x)` a list of one object.
"""

from __future__ import annotations

import operator
import sys
from collections.abc import Callable
from typing import Any

import numpy as np

from narrowgauge.dispatch.exact import FLOAT, PICKLED, bare, plain_copy, taken_out
from narrowgauge.dispatch.routes import ROUTES
from narrowgauge.dispatch.setting import Number, Setting, Wrapped
from narrowgauge.dispatch.texts import READ_BACK, written_down
from narrowgauge.errors import RefusedError

__all__ = ["Scalar", "State", "Text", "plain_item", "refuse_attribute"]


def _binary(ufunc: np.ufunc, call: Callable[..., Any]) -> Callable[[Any, Any], Any]:
    """Return the method of a Python operator: `self` first, computed by the operator itself in the carrier."""
    route = ROUTES[ufunc]

    def method(self: Wrapped, other: Any) -> Any:
        return self._setting.operate(ufunc, route, (self, other), call=call)

    return method


def _reflected(ufunc: np.ufunc, call: Callable[..., Any]) -> Callable[[Any, Any], Any]:
    """Return the method of a reflected Python operator: `self` second."""
    route = ROUTES[ufunc]

    def method(self: Wrapped, other: Any) -> Any:
        return self._setting.operate(ufunc, route, (other, self), call=call)

    return method


def _unary(ufunc: np.ufunc, call: Callable[..., Any]) -> Callable[[Any], Any]:
    """Return the method of a unary Python operator."""
    route = ROUTES[ufunc]

    def method(self: Wrapped) -> Any:
        return self._setting.operate(ufunc, route, (self,), call=call)

    return method


def _by_function(function: Callable[..., Any]) -> Callable[..., Any]:
    """Return the method that is the same as a function of the table with the value in front."""

    def method(self: Wrapped, *arguments: Any, **keywords: Any) -> Any:
        return self._setting.function(self._setting, function, (self, *arguments), keywords)

    return method


class State(Number):
    """Numbers of the state: Python's operators, shared by the array and the 0-d value, and no way out."""

    __slots__ = ()

    dtype = np.dtype(np.float64)

    __add__ = _binary(np.add, operator.add)
    __sub__ = _binary(np.subtract, operator.sub)
    __mul__ = _binary(np.multiply, operator.mul)
    __truediv__ = _binary(np.divide, operator.truediv)
    __floordiv__ = _binary(np.floor_divide, operator.floordiv)
    __mod__ = _binary(np.remainder, operator.mod)
    __pow__ = _binary(np.power, operator.pow)
    __radd__ = _reflected(np.add, operator.add)
    __rsub__ = _reflected(np.subtract, operator.sub)
    __rmul__ = _reflected(np.multiply, operator.mul)
    __rtruediv__ = _reflected(np.divide, operator.truediv)
    __rfloordiv__ = _reflected(np.floor_divide, operator.floordiv)
    __rmod__ = _reflected(np.remainder, operator.mod)
    __rpow__ = _reflected(np.power, operator.pow)
    __neg__ = _unary(np.negative, operator.neg)
    __pos__ = _unary(np.positive, operator.pos)
    __abs__ = _unary(np.absolute, operator.abs)
    __lt__ = _binary(np.less, operator.lt)
    __le__ = _binary(np.less_equal, operator.le)
    __gt__ = _binary(np.greater, operator.gt)
    __ge__ = _binary(np.greater_equal, operator.ge)
    __eq__ = _binary(np.equal, operator.eq)
    __ne__ = _binary(np.not_equal, operator.ne)

    # NumPy's functions with the array in front
    all = _by_function(np.all)
    any = _by_function(np.any)
    argmax = _by_function(np.argmax)
    argmin = _by_function(np.argmin)
    argpartition = _by_function(np.argpartition)
    argsort = _by_function(np.argsort)
    cumprod = _by_function(np.cumprod)
    cumsum = _by_function(np.cumsum)
    diagonal = _by_function(np.diagonal)
    dot = _by_function(np.dot)
    max = _by_function(np.max)
    mean = _by_function(np.mean)
    min = _by_function(np.min)
    nonzero = _by_function(np.nonzero)
    prod = _by_function(np.prod)
    put = _by_function(np.put)
    ravel = _by_function(np.ravel)
    repeat = _by_function(np.repeat)
    round = _by_function(np.round)
    searchsorted = _by_function(np.searchsorted)
    squeeze = _by_function(np.squeeze)
    std = _by_function(np.std)
    sum = _by_function(np.sum)
    swapaxes = _by_function(np.swapaxes)
    take = _by_function(np.take)
    trace = _by_function(np.trace)
    var = _by_function(np.var)

    def __hash__(self) -> int:
        return hash(self._carrier)  # raises TypeError for an array, as ndarray does

    def __bool__(self) -> bool:
        return self._setting.decide(self._carrier)

    def __int__(self) -> int:
        return taken_out(self._carrier, self._setting)

    def __float__(self) -> float:
        if not written_down(self._setting, sys._getframe(1)):
            self._setting.escape(FLOAT)
        return float(self._carrier)

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> Any:
        self._setting.escape(
            "a function or a plain array that does not know the emulated arithmetic asked for plain numbers; "
            "accepted: NumPy functions called, and arrays made, in the kernel's own module, np.array(values) for a "
            "list of the state, a list for constants, and a @ x for a.dot(x) of a plain array a",
        )
        return plain_copy(self._carrier, dtype or np.float64, copy)

    def __bytes__(self) -> bytes:
        raise self._setting.fault(RefusedError, "bytes() is not offered by this version on a value of the state")

    def __reduce_ex__(self, protocol: Any) -> Any:
        raise self._setting.fault(RefusedError, PICKLED)

    def __divmod__(self, other: Any) -> Any:
        return self._setting.ufunc(self._setting, np.divmod, "__call__", (self, other), {})

    def __rdivmod__(self, other: Any) -> Any:
        return self._setting.ufunc(self._setting, np.divmod, "__call__", (other, self), {})

    def __matmul__(self, other: Any) -> Any:
        return self._setting.ufunc(self._setting, np.matmul, "__call__", (self, other), {})

    def __rmatmul__(self, other: Any) -> Any:
        return self._setting.ufunc(self._setting, np.matmul, "__call__", (other, self), {})

    def compress(self, condition: Any, axis: Any = None, out: Any = None) -> Any:
        """Return the values at the places where a condition is true."""
        return self._setting.function(self._setting, np.compress, (condition, self, axis, out), {})

    def clip(self, min: Any = None, max: Any = None, out: Any = None, **keywords: Any) -> Any:
        """Return the values cut to bounds, which are rounded as they meet the state."""
        return self._setting.function(self._setting, np.clip, (self, min, max, out), keywords)

    def conjugate(self) -> Any:
        """Return the value itself: it is real."""
        return self

    conj = conjugate


class Scalar(State):
    """One value of the state: a NumPy scalar of the carrier's type, or a Python float where plain code has one."""

    __slots__ = ()

    # isinstance(x, float) must decide as it does for the np.float64 that plain code has here
    __class__ = np.float64  # type: ignore[assignment]

    __iter__ = None  # with __getitem__ alone Python would try

    def __getitem__(self, key: Any) -> Any:
        return self._setting.wrap(self._carrier[bare(key, self._setting)])

    def __repr__(self) -> str:
        return self._text(f"{float(self._carrier)!r} in {self._setting.arithmetic.format.name}")

    def __str__(self) -> str:
        return self._text(str(float(self._carrier)))

    def __format__(self, specification: str) -> str:
        return self._text(format(float(self._carrier), specification))

    def _text(self, text: str) -> Text:
        self._setting.leave("text")
        made = Text(text)
        made._setting = self._setting
        return made

    def __copy__(self) -> Scalar:
        return self

    def __deepcopy__(self, memo: object) -> Scalar:
        return self

    def __round__(self, digits: int | None = None) -> Any:
        if digits is not None:
            return self._setting.function(self._setting, np.round, (self, digits), {})
        return self._setting.wrap(round(self._carrier))  # an integer, and exact

    def __trunc__(self) -> Any:
        return self._integral(np.trunc)

    def __floor__(self) -> Any:
        return self._integral(np.floor)

    def __ceil__(self) -> Any:
        return self._integral(np.ceil)

    def _integral(self, ufunc: np.ufunc) -> Any:
        """Return an integer of the state, as Python's `math` gives one."""
        part = self._setting.operate(ufunc, ROUTES[ufunc], (self,))
        return self._setting.wrap(int(self._setting.carrier(part)))

    def is_integer(self) -> Any:
        """Return whether the value is a whole number, a boolean of the state."""
        answer = float(self._carrier).is_integer()
        self._setting.note("is_integer", "exact", (self._carrier,), answer)
        return self._setting.wrap(answer)

    shape = ()
    ndim = 0
    size = 1

    @property
    def T(self) -> Scalar:  # noqa: N802  # NumPy's name
        """The value itself."""
        return self

    @property
    def real(self) -> Scalar:
        """The value itself."""
        return self

    def copy(self) -> Scalar:
        """Return the value itself: it is immutable."""
        return self

    def item(self) -> Any:
        """Return the value, held as plain code would hold it."""
        return self._setting.wrap(plain_item(self._carrier))

    tolist = item

    def astype(self, dtype: Any) -> Any:
        """Return the value itself for float64, an exact value for integers and booleans; other floats are refused."""
        if self._setting.float_dtype(dtype) is not None:
            return self
        return self._setting.wrap(np.asarray(self._carrier).astype(dtype)[()])

    def __getattr__(self, name: str) -> Any:
        return refuse_attribute(self, name, np.float64)


class Text(str):
    """A text that was made of a value of the state: a text like any other, except to what makes a number of it."""

    _setting: Setting

    def __float__(self) -> float:
        self._setting.escape(READ_BACK)
        return float(str.__str__(self))

    def __int__(self) -> int:
        integer = int(str.__str__(self))
        self._setting.decide(True)
        self._setting.leave("integer")
        return integer

    def __reduce_ex__(self, protocol: Any) -> Any:
        return str, (str.__str__(self),)


def plain_item(carrier: Any) -> Any:
    """Return what `.item()` gives: a Python float in float64, whose operators differ from NumPy's at zero.

    Narrower formats keep the NumPy scalar, so that a quotient that became x / 0 by rounding is infinite and counted.
    """
    return carrier.item() if getattr(carrier, "dtype", None) == np.float64 else carrier


def refuse_attribute(value: Wrapped, name: str, plain: type) -> Any:
    """Refuse what plain code has and the wrapped value does not: a method when it is called, else at once.

    Raises AttributeError for what plain code does not have either, so that `hasattr` answers as it does today.
    """
    if name.startswith("__") or not hasattr(plain, name):
        raise AttributeError(f"{plain.__name__!r} object has no attribute {name!r}")
    message = f".{name} is not offered by this version on a value of the state"

    def refused(*arguments: Any, **keywords: Any) -> Any:
        raise value._setting.fault(RefusedError, message)

    return refused if callable(getattr(plain, name)) else refused()
