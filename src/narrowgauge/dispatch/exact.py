"""Booleans and integers that depend on the state: comparisons, counts, places, integral parts, and their buffers.

Among themselves and with plain integers they are computed as plain code does, exactly. As soon as a float comes in or
out they become numbers of the state: rounded once, as constants are, where the format lacks the integer, and the
operation is rounded. `0.95 * (S > K)` and `hits / n` are values of the state like any other. A plain array would make
plain floats of them, which nobody rounds.

What Python itself asks for as an integer (`range(k)`, `row[k]` of a list or by one integer, `int(k)`) leaves as one
and is counted as a decision, like an `if`.
"""

from __future__ import annotations

import dis
import operator
import sys
from collections.abc import Callable, Iterator, Sequence
from typing import Any

import numpy as np

from narrowgauge.dispatch.routes import ROUTES
from narrowgauge.dispatch.setting import Number, Setting, Wrapped, holds
from narrowgauge.dispatch.texts import written_down
from narrowgauge.errors import RefusedError

__all__ = [
    "FLOAT", "PICKLED", "Exact", "bare", "compute", "is_exact", "plain_copy", "settled", "taken_out",
]  # fmt: skip

_STORE = dis.opmap["STORE_SUBSCR"]
_SHAPE = frozenset({"dtype", "flags", "itemsize", "nbytes", "ndim", "shape", "size", "strides"})
_BY_FUNCTION = frozenset({"dot", "mean", "std", "var"})  # methods that may give numbers
_WITH_DTYPE = frozenset({"cumprod", "cumsum", "prod", "sum"})  # and those that do where they are asked to
_SEQUENCES = (list, tuple, str, bytes)
FLOAT = (
    "float(), or a store into a plain array, takes a value out of the emulated arithmetic; "
    "accepted: leave it as it is, arrays that the kernel's own module makes, and f-strings or %s for a text"
)
_ARRAY = (
    "a plain array, or a function that does not know the emulated arithmetic, asked for integers or booleans of the "
    "state; accepted: np.asarray(table)[key] or np.take(table, key) for a table of constants, np.array(values) for a "
    "list, and buffers that the kernel's own module makes with np.zeros"
)
PICKLED = (
    "a value of the state is pickled where its run is not known; accepted: copy.deepcopy, or pickle imported in the "
    "kernel's own module"
)
_STORED = (
    "an integer of the state is stored into a plain array; accepted: buffers that the kernel's own module makes with "
    "np.zeros(n, dtype=int)"
)


def _binary(ufunc: np.ufunc, call: Callable[..., Any]) -> Callable[[Any, Any], Any]:
    """Return the method of a Python operator: `self` first."""

    def method(self: Exact, other: Any) -> Any:
        return compute(self._setting, ufunc, (self, other), call)

    return method


def _reflected(ufunc: np.ufunc, call: Callable[..., Any]) -> Callable[[Any, Any], Any]:
    """Return the method of a reflected Python operator: `self` second."""

    def method(self: Exact, other: Any) -> Any:
        return compute(self._setting, ufunc, (other, self), call)

    return method


def _unary(ufunc: np.ufunc, call: Callable[..., Any]) -> Callable[[Any], Any]:
    """Return the method of a unary Python operator."""

    def method(self: Exact) -> Any:
        return compute(self._setting, ufunc, (self,), call)

    return method


def _in_place(call: Callable[..., Any]) -> Callable[[Any, Any], Any]:
    """Return the method of an in-place operator: one value is immutable, and NumPy refuses a float in its own words."""

    def method(self: Exact, other: Any) -> Any:
        if not isinstance(self._carrier, np.ndarray):
            return NotImplemented
        call(self._carrier, bare(_carrier(other, self._setting), self._setting))
        return self

    return method


class Exact(Wrapped):
    """An array of booleans or integers, or one of them, that depends on the state; one value is as plain code's is.

    It indexes, counts and selects as plain ones do, in arrays of the state and of its own kind.
    """

    __slots__ = ()

    @property  # type: ignore[misc]  # what isinstance() sees: the plain type
    def __class__(self) -> Any:
        return type(self._carrier)

    __add__, __radd__ = _binary(np.add, operator.add), _reflected(np.add, operator.add)
    __sub__, __rsub__ = _binary(np.subtract, operator.sub), _reflected(np.subtract, operator.sub)
    __truediv__, __rtruediv__ = _binary(np.divide, operator.truediv), _reflected(np.divide, operator.truediv)
    __floordiv__ = _binary(np.floor_divide, operator.floordiv)
    __rfloordiv__ = _reflected(np.floor_divide, operator.floordiv)
    __mod__, __rmod__ = _binary(np.remainder, operator.mod), _reflected(np.remainder, operator.mod)
    __divmod__, __rdivmod__ = _binary(np.divmod, divmod), _reflected(np.divmod, divmod)
    __pow__, __rpow__ = _binary(np.power, operator.pow), _reflected(np.power, operator.pow)
    __matmul__, __rmatmul__ = _binary(np.matmul, operator.matmul), _reflected(np.matmul, operator.matmul)
    __and__, __rand__ = _binary(np.bitwise_and, operator.and_), _reflected(np.bitwise_and, operator.and_)
    __or__, __ror__ = _binary(np.bitwise_or, operator.or_), _reflected(np.bitwise_or, operator.or_)
    __xor__, __rxor__ = _binary(np.bitwise_xor, operator.xor), _reflected(np.bitwise_xor, operator.xor)
    __lshift__, __rlshift__ = _binary(np.left_shift, operator.lshift), _reflected(np.left_shift, operator.lshift)
    __rshift__, __rrshift__ = _binary(np.right_shift, operator.rshift), _reflected(np.right_shift, operator.rshift)
    __lt__, __le__ = _binary(np.less, operator.lt), _binary(np.less_equal, operator.le)
    __gt__, __ge__ = _binary(np.greater, operator.gt), _binary(np.greater_equal, operator.ge)
    __eq__, __ne__ = _binary(np.equal, operator.eq), _binary(np.not_equal, operator.ne)
    __neg__, __pos__ = _unary(np.negative, operator.neg), _unary(np.positive, operator.pos)
    __abs__, __invert__ = _unary(np.absolute, operator.abs), _unary(np.invert, operator.invert)
    __iadd__, __isub__, __imul__ = _in_place(operator.iadd), _in_place(operator.isub), _in_place(operator.imul)
    __itruediv__, __ifloordiv__ = _in_place(operator.itruediv), _in_place(operator.ifloordiv)
    __imod__, __ipow__ = _in_place(operator.imod), _in_place(operator.ipow)
    __iand__, __ior__, __ixor__ = _in_place(operator.iand), _in_place(operator.ior), _in_place(operator.ixor)
    __ilshift__, __irshift__ = _in_place(operator.ilshift), _in_place(operator.irshift)

    def __mul__(self, other: Any) -> Any:
        if isinstance(other, _SEQUENCES) and not isinstance(self._carrier, np.ndarray):
            return NotImplemented  # Python repeats the sequence
        return compute(self._setting, np.multiply, (self, other), operator.mul)

    def __rmul__(self, other: Any) -> Any:
        if isinstance(other, _SEQUENCES) and not isinstance(self._carrier, np.ndarray):
            return NotImplemented
        return compute(self._setting, np.multiply, (other, self), operator.mul)

    def __hash__(self) -> int:
        return hash(self._carrier)  # raises TypeError for an array, as ndarray does

    def __bool__(self) -> bool:
        return self._setting.decide(self._carrier)

    def __int__(self) -> int:
        return taken_out(self._carrier, self._setting)

    def __index__(self) -> int:
        integer = operator.index(self._carrier)
        self._setting.decide(True)
        return integer

    def __float__(self) -> float:
        if not written_down(self._setting, sys._getframe(1)):
            self._setting.escape(FLOAT)
        return float(self._carrier)

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> Any:
        self._setting.escape(_ARRAY)
        return plain_copy(self._carrier, dtype, copy)

    def __round__(self, *digits: Any) -> Any:
        return self._setting.wrap(round(self._carrier, *digits))

    def __len__(self) -> int:
        return len(self._carrier)

    def __iter__(self) -> Iterator[Any]:
        return map(self._setting.wrap, self._carrier)

    def __contains__(self, value: Any) -> bool:
        iter(self._carrier)  # Python's error for one value
        return bool((self == value).any())

    def __getitem__(self, key: Any) -> Any:
        return self._setting.wrap(self._carrier[bare(key, self._setting)])

    def __setitem__(self, key: Any, value: Any) -> None:
        self._carrier[bare(key, self._setting)] = bare(_carrier(value, self._setting), self._setting)

    def __copy__(self) -> Exact:
        return Exact(self._carrier.copy("K"), self._setting) if isinstance(self._carrier, np.ndarray) else self

    def __deepcopy__(self, memo: object) -> Exact:
        return self.__copy__()

    def __reduce_ex__(self, protocol: Any) -> Any:
        raise self._setting.fault(RefusedError, PICKLED)

    def __repr__(self) -> str:
        self._setting.leave("text")
        return repr(self._carrier)

    def __str__(self) -> str:
        self._setting.leave("text")
        return str(self._carrier)

    def __format__(self, specification: str) -> str:
        self._setting.leave("text")
        return format(self._carrier, specification)

    def astype(self, dtype: Any, **keywords: Any) -> Any:
        """Return numbers of the state for float64, rounded once, or exact values; other floats are refused."""
        if self._setting.float_dtype(dtype) is not None:
            return _as_number(self, self._setting)
        return self._setting.wrap(self._carrier.astype(dtype, **keywords))

    def __getattr__(self, name: str) -> Any:
        if name.startswith("__"):
            raise AttributeError(f"{self.__class__.__name__!r} object has no attribute {name!r}")
        found = getattr(self._carrier, name)
        if name in _SHAPE:
            return found
        if not callable(found):
            return settled(found, f".{name}", self._setting)

        def method(*arguments: Any, **keywords: Any) -> Any:
            if name in _BY_FUNCTION or (name in _WITH_DTYPE and (len(arguments) > 1 or "dtype" in keywords)):
                return self._setting.function(self._setting, getattr(np, name), (self, *arguments), keywords)
            given = (*arguments, *keywords.values())
            result = found(*bare(arguments, self._setting), **bare(keywords, self._setting))
            return settled(result, f".{name}", self._setting, given)

        return method


def compute(setting: Setting, ufunc: np.ufunc, operands: Sequence[Any], call: Callable[..., Any] | None = None) -> Any:
    """Return one operation on exact values, exact where plain code's result is, else on numbers of the state, rounded.

    `call` is the Python operator, if one was written. Raises RefusedError for floats narrower than float64.
    """
    if all(is_exact(operand, setting) for operand in operands):
        result = (call or ufunc)(*(bare(operand, setting) for operand in operands))
        if not _is_double(result):
            return settled(result, f"np.{ufunc.__name__}", setting)
    for operand in operands:
        if not isinstance(operand, Wrapped) and getattr(getattr(operand, "dtype", None), "kind", "") == "f":
            setting.float_dtype(operand.dtype)
    route = ROUTES.get(ufunc)
    if route is None:  # not one elementary operation: a product of matrices, two results, or refused
        return setting.ufunc(setting, ufunc, "__call__", [_as_number(operand, setting) for operand in operands], {})
    return setting.operate(ufunc, route, operands, call=call)


def bare(value: Any, setting: Setting) -> Any:
    """Return a value with the exact values in a nest of lists, tuples and dictionaries exchanged for plain ones."""
    if isinstance(value, Exact):
        return setting.carrier(value)
    if isinstance(value, (list, tuple)):
        items = [bare(item, setting) for item in value]
        return items if isinstance(value, list) else tuple(items)
    if isinstance(value, dict):
        return {key: bare(item, setting) for key, item in value.items()}
    return value


def is_exact(value: Any, setting: Setting) -> bool:
    """Whether a value, or a nest of lists, is of booleans or integers alone."""
    if isinstance(value, (Exact, int, np.integer, np.bool_)):
        return True
    if isinstance(value, float) or holds(value, Number):
        return False
    return np.asarray(bare(value, setting)).dtype.kind in "biu"


def _as_number(value: Any, setting: Setting) -> Any:
    """Return an exact value as numbers of the state, rounded once; any other value as it is."""
    if not isinstance(value, Exact):
        return value
    carrier = np.asarray(setting.admit(value)).astype(setting.arithmetic.format.carrier)
    return setting.wrap(carrier if isinstance(value, np.ndarray) else carrier[()])


def settled(result: Any, name: str, setting: Setting, given: Sequence[Any] = ()) -> Any:
    """Return what NumPy made of exact values alone: exact; floats, and what holds memory, are refused by name.

    Raises EscapeError where the result is a plain array of those `given`, which has been written to.
    """
    if isinstance(result, (list, tuple)):
        items = [settled(item, name, setting) for item in result]
        return items if isinstance(result, list) else tuple(items)
    if result is None or isinstance(result, (str, np.dtype)):
        return result
    if not isinstance(result, (int, np.ndarray, np.generic)):
        kind = "numbers" if isinstance(result, float) else f"a {type(result).__name__}"
    elif isinstance(result, int) or result.dtype.kind in "biu":
        if isinstance(result, np.ndarray) and any(result is argument for argument in given):
            raise setting.plain_target(name)
        return setting.wrap(result)
    else:
        kind = "numbers"
    raise setting.fault(RefusedError, f"{name} of booleans or integers gives {kind} that this version cannot round")


def taken_out(carrier: Any, setting: Setting) -> int:
    """Return the integer that int() takes out of the state, counted as a decision.

    Raises EscapeError where it is stored into a plain array, which would be lost from sight.
    """
    integer = int(carrier)
    if written_down(setting, sys._getframe(2)):
        return integer
    frame = setting.frame()
    if frame is not None and frame.f_code.co_code[frame.f_lasti] == _STORE:  # no list or dictionary calls int()
        setting.escape(_STORED)
        return integer
    setting.decide(True)
    setting.leave("integer")
    return integer


def plain_copy(carrier: Any, dtype: Any, copy: bool | None) -> np.ndarray[Any, Any]:
    """Return the plain array that a value leaves as; never the carrier's own memory, which must stay rounded.

    Raises ValueError where NumPy's protocol asks for that memory.
    """
    if copy is False:
        raise ValueError("a value of the emulated arithmetic gives a plain array only as a copy")
    return np.array(carrier, dtype)


def _carrier(value: Any, setting: Setting) -> Any:
    return setting.carrier(value) if isinstance(value, Wrapped) else value


def _is_double(result: Any) -> bool:
    return isinstance(result, float) or getattr(result, "dtype", None) == np.float64
