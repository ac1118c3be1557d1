"""What every wrapped value points to: its arithmetic, its observer, and where in the user's code it is.

`Setting.operate` is the one place where an operation happens: it admits the operands, has the arithmetic compute
and round, tells the observer, and wraps the result.
"""

from __future__ import annotations

import os
import sys
from collections import Counter
from collections.abc import Callable, Sequence
from types import FrameType
from typing import Any, Literal, NamedTuple, Protocol

import numpy as np

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.errors import DispatchError, EscapeError, RefusedError, SettingsMixedError

__all__ = ["Number", "Observer", "Place", "Route", "Setting", "Way", "Wrapped", "holds"]

Route = Literal["exact", "rounded", "accumulated", "whole"]
Way = Literal["escape", "integer", "text"]  # how a value leaves the emulation and the run goes on
_FLOATS = frozenset(form.storage for form in FORMATS.values())


class Place(NamedTuple):
    """A line of the user's code."""

    file: str
    line: int

    def __str__(self) -> str:
        return f"{self.file}:{self.line}"

    def resolved(self) -> Place:
        """Return the same line with the file's path made absolute, links followed."""
        return Place(os.path.realpath(self.file), self.line)


class Observer(Protocol):
    """Sees every operation of a run, after it was computed and rounded."""

    def saw(self, setting: Setting, operation: str, route: Route, operands: Sequence[Any], result: Any) -> None:
        """Take note of one operation; `operands` and `result` are carriers, to be read only."""

    def met(self, setting: Setting, constant: Any) -> None:
        """Take note of a plain number, or an array of them, that met the state, as it was before rounding."""

    def decided(self, setting: Setting, answer: bool) -> None:
        """Take note of a branch in the control flow that depends on the state, or of an integer that leaves it."""

    def left(self, setting: Setting, way: Way) -> None:
        """Take note of a value that leaves the emulation: on a line that may let it, by int(), or as text."""


class Wrapped:
    """Base of the array, the 0-d value and the exact value: a carrier and the setting that it belongs to."""

    __slots__ = ("_carrier", "_setting")

    _carrier: Any
    _setting: Setting

    def __init__(self, carrier: Any, setting: Setting) -> None:
        self._carrier = carrier
        self._setting = setting

    def __array_ufunc__(self, ufunc: np.ufunc, method: str, *inputs: Any, **keywords: Any) -> Any:
        return self._setting.ufunc(self._setting, ufunc, method, inputs, keywords)

    def __array_function__(self, function: Any, types: Any, arguments: Any, keywords: Any) -> Any:
        return self._setting.function(self._setting, function, arguments, keywords)


class Number(Wrapped):
    """Base of the array and the 0-d value: its carrier holds numbers that the format has."""

    __slots__ = ()


class Setting:
    """One run's arithmetic and everything that a wrapped value needs to know.

    `files` are the file names of the user's modules that were executed for this run; `wrap`, `ufunc` and
    `function` are given by the modules below this one, which know the array and the tables. `faults` keeps every
    refusal and escape in the order in which they happened, also those that the kernel swallowed; `allowed` holds the
    lines, by resolved path, where plain values may leave. `direct` are the operations that an array may do without
    `operate`: those of the arithmetic where there is no observer, none where there is one. `casts` is None, or casts to
    formats of the kernel's own choice are ignored and counted there by line.
    """

    __slots__ = (
        "_wrap", "allowed", "arithmetic", "casts", "direct", "draws", "faults", "files", "function", "observer",
        "paths", "ufunc",
    )  # fmt: skip

    def __init__(
        self,
        arithmetic: Arithmetic,
        *,
        files: set[str],
        wrap: Callable[[Any, Setting], Any],
        ufunc: Callable[[Setting, np.ufunc, str, Sequence[Any], dict[str, Any]], Any],
        function: Callable[[Setting, Callable[..., Any], Sequence[Any], dict[str, Any]], Any],
        observer: Observer | None = None,
    ) -> None:
        self.arithmetic = arithmetic
        self.files = files
        self.observer = observer
        self.direct = arithmetic.direct if observer is None else {}
        self.ufunc = ufunc
        self.function = function
        self.draws: Any = None  # the Feed of a kernel that draws for itself
        self.paths: int | None = None  # of the call under way: a reduction over an axis of that length is over paths
        self.faults: list[DispatchError] = []
        self.allowed: frozenset[Place] = frozenset()
        self.casts: Counter[Place | None] | None = None
        self._wrap = wrap

    def frame(self) -> FrameType | None:
        """Return the innermost frame of the user's modules that is being executed, or None outside them."""
        frame: FrameType | None = sys._getframe(1)
        while frame is not None and frame.f_code.co_filename not in self.files:
            frame = frame.f_back
        return frame

    def where(self) -> Place | None:
        """Return the innermost line of the user's modules that is being executed, or None outside them."""
        frame = self.frame()
        return None if frame is None else Place(frame.f_code.co_filename, frame.f_lineno)

    def fault(self, kind: type[DispatchError], message: str) -> DispatchError:
        """Record a fault with its place and return it, to be raised."""
        place = self.where()
        error = kind(f"{place}: {message}" if place else message)
        self.faults.append(error)
        return error

    def plain_target(self, name: str) -> DispatchError:
        """Record and return the fault of an `out=` of `name` that is no array of the state."""
        return self.fault(EscapeError, f"out= of {name} is a plain array; accepted: an array of the state")

    def strange(self, value: Any) -> DispatchError:
        """Record and return the fault of an operand of a foreign type."""
        return self.fault(RefusedError, f"a {type(value).__name__} met the state; accepted: numbers and arrays")

    def escape(self, message: str) -> None:
        """Let a plain value leave where the line under way is allowed to; on any other, raise the EscapeError."""
        place = self.where()
        if place is None or place.resolved() not in self.allowed:
            raise self.fault(EscapeError, message)
        self.leave("escape")

    def leave(self, way: Way) -> None:
        """Let the observer know that a value leaves the emulation."""
        if self.observer is not None:
            self.observer.left(self, way)

    def wrap(self, result: Any) -> Any:
        """Return a carrier as an array, a 0-d value or an exact value; lists and tuples item by item."""
        return self._wrap(result, self)

    def carrier(self, value: Wrapped) -> Any:
        """Return the carrier of a wrapped value as it is; SettingsMixedError for a value of another run."""
        if value._setting is not self:
            raise self.fault(
                SettingsMixedError,
                "arrays of two runs met in one operation; a cache or a global of the kernel outlives the run",
            )
        return value._carrier

    def admit(self, operand: Any) -> Any:
        """Return the carrier of an operand: weak scalars, constant arrays and exact values are rounded once.

        NotImplemented for a foreign type. Raises SettingsMixedError for a value of another run, RefusedError for
        numbers that cannot be rounded.
        """
        if isinstance(operand, Wrapped):
            carrier = self.carrier(operand)
            return carrier if isinstance(operand, Number) else self._number(carrier)
        if isinstance(operand, (float, int, np.floating, np.integer, np.bool_)):
            if isinstance(operand, np.longdouble):
                raise self.fault(RefusedError, "a long double met the state; accepted: floats to 64 bits")
            if self.observer is not None:
                self.observer.met(self, operand)
            return self.arithmetic.constant(operand)
        if isinstance(operand, np.ndarray):
            carrier = self._constants(operand)
            if self.observer is not None:
                self.observer.met(self, operand)
            return carrier
        if isinstance(operand, (list, tuple)):
            if holds(operand, Wrapped):
                raise self.fault(RefusedError, "a list of values of the state as an operand; accepted: np.array(list)")
            return self.admit(np.asarray(operand))
        if isinstance(operand, (complex, np.complexfloating)):
            raise self.fault(RefusedError, "a complex number met the state; accepted: real numbers")
        return NotImplemented

    def operate(
        self,
        ufunc: np.ufunc,
        route: Route,
        operands: Sequence[Any],
        *,
        out: Any = None,
        call: Callable[..., Any] | None = None,
    ) -> Any:
        """Compute one elementary operation, rounded; the wrapped result, or NotImplemented for a foreign operand.

        `out` is a carrier array. With `call` an in-place operator the caller keeps its own object.
        """
        carriers = []
        for operand in operands:
            # the two most frequent kinds without the call of `admit`
            if isinstance(operand, Number) and operand._setting is self:
                carriers.append(operand._carrier)
            elif type(operand) is float:
                carriers.append(self.arithmetic.constant(operand))
            else:
                carrier = self.admit(operand)
                if carrier is NotImplemented:
                    return NotImplemented
                carriers.append(carrier)
        if self.observer is None:
            return self._wrap(self.arithmetic.apply(ufunc, carriers, out, call), self)
        for operand in operands:
            if type(operand) is float:  # the others were noted by `admit`
                self.observer.met(self, operand)
        seen = carriers if out is None else [_kept(carrier, out) for carrier in carriers]
        result = self.arithmetic.apply(ufunc, carriers, out, call)
        self.observer.saw(self, ufunc.__name__, route, seen, result)
        return self._wrap(result, self)

    def note(self, operation: str, route: Route, operands: Sequence[Any], result: Any) -> None:
        """Let the observer see an operation that is no ufunc; `operands` and `result` are carriers."""
        if self.observer is not None:
            self.observer.saw(self, operation, route, operands, result)

    def decide(self, truth: Any) -> bool:
        """Return the truth of a carrier that the control flow asks for, and let the observer count it."""
        answer = bool(truth)
        if self.observer is not None:
            self.observer.decided(self, answer)
        return answer

    def float_dtype(self, dtype: Any) -> np.dtype[Any] | None:
        """Return float64 where a creator or a cast means the state, None for integers and booleans.

        Raises RefusedError for every other type, unless casts are ignored.
        """
        wanted = np.dtype(dtype if dtype is not None else np.float64)
        if wanted.kind in "biu":
            return None
        if self.casts is not None and dtype is not None and wanted in _FLOATS:
            self.casts[self.where()] += 1
            return np.dtype(np.float64)
        if wanted == np.float64:
            return wanted
        raise self.fault(
            RefusedError,
            f"the kernel fixes dtype {wanted}; accepted: float64 or none, since the audit chooses the format",
        )

    def _number(self, carrier: Any) -> Any:
        """Return booleans or integers of the state as numbers of the format; float64 takes them as plain code does."""
        form = self.arithmetic.format
        if form.name == "float64":
            return carrier
        if not isinstance(carrier, np.ndarray):
            return form.carrier.type(self.arithmetic.constant(carrier))
        return carrier.astype(form.carrier) if carrier.dtype.kind == "b" else self._constants(carrier)

    def _constants(self, array: np.ndarray[Any, Any]) -> Any:
        """Return a plain array as the state meets it: booleans as they are, numbers rounded as constants."""
        kind = array.dtype.kind
        if type(array) not in (np.ndarray, np.memmap) or kind == "O":  # a matrix multiplies in its own way
            what = "an array of Python objects" if kind == "O" else f"a {type(array).__name__}"
            raise self.fault(RefusedError, f"{what} met the state; accepted: plain arrays of numbers")
        if kind == "b" or (array.dtype == np.float64 and self.arithmetic.format.name == "float64"):
            return array
        try:
            return self.arithmetic.cast(array)
        except ValueError as problem:
            raise self.fault(RefusedError, f"a plain array met the state: {problem}") from None


def _kept(carrier: Any, out: Any) -> Any:
    """Return an operand as it is before `out` is written: a copy where it could lie in the same memory."""
    return carrier.copy() if isinstance(carrier, np.ndarray) and np.may_share_memory(carrier, out) else carrier


def holds(value: Any, kind: type[Wrapped]) -> bool:
    """Whether a value, or anything inside a nest of lists, tuples and dictionaries, is of that kind."""
    if isinstance(value, (list, tuple)):
        return any(holds(item, kind) for item in value)
    if isinstance(value, dict):
        return any(holds(item, kind) for item in value.values())
    return isinstance(value, kind)
