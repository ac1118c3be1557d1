"""An arithmetic in which every source line, and every kind of input, has a format of its own.

Values lie in float64 carriers. A line is the innermost frame in a listed module; an operation is rounded as its line
says, whatever made its operands: it is computed in float64 on the operands as they are, and the result is rounded once.
A rounding error then belongs to one line alone, so that the shares of the lines can add up to the whole. Where
`Widths.converts` says so, operands are first converted to the format of the line, as code must that computes the line
in that format; so is a constant, which then follows its line.

The sums that a line computes are those of folds.py, in order, also where a whole float32 run takes NumPy's own.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence, Set
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.arithmetic.formats import Format
from narrowgauge.arithmetic.indouble import ROUNDS_NOTHING, InDouble
from narrowgauge.arithmetic.rounding import Floats
from narrowgauge.dispatch.placed import Operation, Placed
from narrowgauge.dispatch.setting import Place

__all__ = ["CONSTANTS", "DRAWS", "STEP", "ByLine", "Input", "Item", "Widths"]

Input = Literal["draws", "step size", "constants"]
Item = Place | Input
DRAWS, STEP, CONSTANTS = ("draws", "step size", "constants")  # type: tuple[Input, Input, Input]

_DOUBLE = Format(
    name="a format by line",
    precision=53,
    emax=1023,
    bits=64,
    carrier=np.dtype(np.float64),
    storage=np.dtype(np.float64),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Widths:
    """The format that each line and each kind of input is rounded to: `named` ones, and the `rest`. None: not rounded.

    `at` has single operations that are computed in another format than their line.
    `converts`: operands are converted to the format of the line that uses them, and constants follow their line.
    """

    rest: Format | None
    named: Mapping[Item, Format | None] = field(default_factory=dict)
    converts: bool = False
    at: Mapping[Operation, Format] = field(default_factory=dict)

    def of(self, item: Item | None) -> Format | None:
        """Return the format of a line or a kind of input; the item None is what happens outside the user's modules."""
        return self.rest if item is None else self.named.get(item, self.rest)

    def drawn(self) -> Arithmetic:
        """Return the arithmetic in which draws are rounded and summed, in float64 carriers."""
        form = self.of(DRAWS)
        return Arithmetic(format=_DOUBLE) if form is None else InDouble(form)


class ByLine(Placed):
    """Rounds each operation as `widths` says for the line under way, to nearest, or leaves it in float64.

    `lasting` are the constants, with the lines on which they are met, that do not depend on the step size; every other
    one is taken for a step size. None: all are constants.
    """

    _widths: Widths
    _lasting: Set[tuple[Place | None, float]] | None
    _narrow: dict[str, InDouble]

    def __init__(self, widths: Widths, lasting: Set[tuple[Place | None, float]] | None = None) -> None:
        for name, value in (("_widths", widths), ("_lasting", lasting), ("_narrow", {})):
            object.__setattr__(self, name, value)  # arithmetics are frozen
        super().__init__(format=_DOUBLE)

    @property
    def native(self) -> bool:
        """Whether the line under way is not rounded."""
        return self._here() is None

    def apply(
        self,
        ufunc: np.ufunc,
        operands: Sequence[Any],
        out: Floats | None = None,
        call: Callable[..., Any] | None = None,
    ) -> Any:
        """Compute `ufunc` in float64 and round the result once in the format of the line under way."""
        form = self._here()
        if form is None:
            return super().apply(ufunc, operands, out, call)
        narrow = self._in(form)
        if self._widths.converts and WAYS[ufunc] not in ROUNDS_NOTHING:
            operands = [narrow.cast(one) if isinstance(one, np.ndarray) else narrow.constant(one) for one in operands]
        return narrow.apply(ufunc, operands, out, call)

    def constant(self, number: float | np.generic) -> Any:
        """Return a weak scalar as it meets the line under way."""
        form = self._of_constant(number)
        return super().constant(number) if form is None else self._in(form).constant(number)

    weak = constant

    def constants(self, values: npt.NDArray[Any]) -> Floats:
        """Return a plain array as it meets the line under way."""
        form = self._here() if self._widths.converts else self._widths.of(CONSTANTS)
        return self._in(form).cast(values) if form is not None else super().cast(values)

    def cast(self, values: npt.NDArray[Any]) -> Floats:
        """Return what the line under way computed as a whole, rounded once in its format."""
        form = self._here()
        return self._in(form).cast(values) if form is not None else super().cast(values)

    def holds(self, values: npt.NDArray[Any]) -> bool:
        """Every float64: what may be stored was settled when the format was tried by itself."""
        return True

    def _of_constant(self, number: float | np.generic) -> Format | None:
        if self._widths.converts:
            return self._here()
        if self._lasting is None or (self._place(), _key(number)) in self._lasting:
            return self._widths.of(CONSTANTS)
        return self._widths.of(STEP)

    def _here(self) -> Format | None:
        operation = self.operation() if self._widths.at else None
        if operation is not None and operation in self._widths.at:
            return self._widths.at[operation]
        return self._widths.of(self._place())

    def _place(self) -> Place | None:
        return None if self._setting is None else self._setting.where()

    def _in(self, form: Format) -> InDouble:
        if form.name not in self._narrow:
            self._narrow[form.name] = InDouble(form)
        return self._narrow[form.name]


def _key(number: float | np.generic) -> float:
    try:
        return float(number)
    except OverflowError:  # an integer past float64
        return np.inf
