"""Arithmetics that need to know where in the user's code an operation stands: what-ifs that single operations decide.

`Fused` and `Carried` compute as another machine or another source might, without touching the kernel.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence, Set
from dataclasses import dataclass
from types import FrameType
from typing import Any, NamedTuple

import numpy as np

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.formats import Format
from narrowgauge.arithmetic.rounding import Floats
from narrowgauge.dispatch.setting import Place, Setting

__all__ = ["Carried", "Fused", "Operation", "Placed"]

_LATEST = 64  # results that are remembered


class Operation(NamedTuple):
    """One operation of the user's code: its line, and which of the line's instructions it is."""

    place: Place
    instruction: int


@dataclass(frozen=True, slots=True, eq=False)
class _Left:
    """What an addition left: its result, the values that this had then, and the error of each."""

    result: Any
    values: Floats
    error: Floats

    def alike(self, state: Any) -> bool:
        """Whether a state has the shape of the result."""
        return bool(np.shape(state) == self.values.shape)

    def same(self, state: Any) -> Any:
        """Return where a state still is what was left."""
        return np.asarray(state) == self.values

    def of(self, state: Any) -> Any:
        """Return the error that a state carries, 0 where it is another value by now."""
        error = np.where(self.same(state), self.error, self.error.dtype.type(0))
        return error if error.ndim else error[()]


class Placed(Arithmetic):
    """An arithmetic that asks a setting which operation is under way."""

    _setting: Setting | None

    def __init__(self, **fields: Any) -> None:
        object.__setattr__(self, "_setting", None)  # arithmetics are frozen
        super().__init__(**fields)
        self.direct.clear()  # what is computed there would not ask

    def follow(self, setting: Setting) -> None:
        """Ask this setting from now on."""
        object.__setattr__(self, "_setting", setting)

    def operation(self) -> Operation | None:
        """Return the operation under way, None outside the user's modules."""
        frame = None if self._setting is None else self._setting.frame()
        return None if frame is None else Operation(Place(frame.f_code.co_filename, frame.f_lineno), frame.f_lasti)


class Fused(Placed):
    """Products feed sums of the same line unrounded: one rounding where a machine with fused multiply-add has one.

    Of two products in a sum the left one does, as far as that line's own operations go; compilers differ.
    """

    _products: dict[int, tuple[Any, Any, Any, Place]]

    def __init__(self, form: Format) -> None:
        object.__setattr__(self, "_products", {})
        super().__init__(format=form, fused=True)

    def apply(
        self,
        ufunc: np.ufunc,
        operands: Sequence[Any],
        out: Floats | None = None,
        call: Callable[..., Any] | None = None,
    ) -> Any:
        """Compute as `Arithmetic.apply` does, a sum of a product of the same line with one rounding."""
        if ufunc not in (np.add, np.subtract, np.multiply) or (here := self.operation()) is None:
            return super().apply(ufunc, operands, out, call)
        if ufunc is np.multiply:
            result = super().apply(ufunc, operands, out, call)
            if out is None:
                _remember(self._products, result, (result, operands[0], operands[1], here.place))
            return result
        for side in (0, 1):
            known = self._products.get(id(operands[side]))
            if known is not None and known[3] == here.place:
                _, x, y, _ = known
                z = operands[1 - side]
                if ufunc is np.subtract:
                    x, z = (x, np.negative(z)) if side == 0 else (np.negative(x), z)
                return self.fma(x, y, z, out)
        return super().apply(ufunc, operands, out, call)


class Carried(Placed):
    """The error of an addition to the state is carried along and joins what is added next, in the same format.

    `sums` are the additions x = x + e whose result comes back as x. e is first made e plus the error that x carries,
    rounded; then x + e is rounded, and its own error is carried on, on the paths where x still is what the addition
    left: a state that was clipped, or stored elsewhere, is told by its values. Compensated summation: "Further remarks
    on reducing truncation errors", Communications of the ACM 8(1), 1965, doi 10.1145/363707.363723 (recalled from
    memory).
    """

    _sums: Set[Operation]
    _errors: dict[int, _Left]
    _last: dict[Operation, _Left]
    _call: FrameType | None

    def __init__(self, form: Format, sums: Set[Operation]) -> None:
        object.__setattr__(self, "_sums", sums)
        object.__setattr__(self, "_errors", {})
        object.__setattr__(self, "_last", {})
        object.__setattr__(self, "_call", None)
        super().__init__(format=form)

    def apply(
        self,
        ufunc: np.ufunc,
        operands: Sequence[Any],
        out: Floats | None = None,
        call: Callable[..., Any] | None = None,
    ) -> Any:
        """Compute as `Arithmetic.apply` does, but for the additions to the state."""
        if ufunc not in (np.add, np.subtract) or (here := self.operation()) not in self._sums or here is None:
            return super().apply(ufunc, operands, out, call)
        state, added = operands
        known = self._errors.get(id(state))
        if known is None and ufunc is np.add and id(added) in self._errors:
            state, added = added, state
            known = self._errors[id(state)]
        self._see_call()
        if known is None:
            known = self._by_values(state)
            if known is None and ufunc is np.add and (known := self._by_values(added)) is not None:
                state, added = added, state
        if known is not None:
            error = known.of(state)
            # x - e carries the error of x in e with the other sign
            added = super().apply(ufunc, [added, error])
        with np.errstate(all="ignore"):
            exact = ufunc(np.asarray(state, np.float64), np.asarray(added, np.float64))
            result = super().apply(ufunc, [state, added], out)
            error = self.cast(np.asarray(exact - np.asarray(result, np.float64)))
        left = _Left(result, np.array(result), error)
        _remember(self._errors, result, left)
        self._last[here] = left
        return result

    def _see_call(self) -> None:
        """Forget the values of an earlier call of the kernel: the state of this one is its own."""
        assert self._setting is not None  # an operation among the sums has a place
        outermost = frame = self._setting.frame()
        while frame is not None:
            if frame.f_code.co_filename in self._setting.files:
                outermost = frame
            frame = frame.f_back
        if outermost is not self._call:  # which is kept, so that no other frame has its id
            object.__setattr__(self, "_call", outermost)
            self._last.clear()

    def _by_values(self, state: Any) -> _Left | None:
        """Return the latest sum of an operation that most values of a state still are."""
        shares = {one: np.count_nonzero(one.same(state)) for one in self._last.values() if one.alike(state)}
        best = max(shares, key=shares.__getitem__, default=None)
        return best if best is not None and 2 * shares[best] > np.size(state) else None


def _remember(known: dict[int, Any], result: Any, row: Any) -> None:
    """Keep what is known of a result, and the result with it, so that no other value gets its id."""
    known.pop(id(result), None)
    known[id(result)] = row
    if len(known) > _LATEST:
        del known[next(iter(known))]
