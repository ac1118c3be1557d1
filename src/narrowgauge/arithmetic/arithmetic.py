"""An arithmetic: format, rounding mode, subnormals kept or flushed, products fused into sums or not."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.elementary import WAYS, compute_wide, look_up
from narrowgauge.arithmetic.formats import Format, format_named
from narrowgauge.arithmetic.rounding import Floats, narrow, narrow_integer, narrow_number, round_carrier
from narrowgauge.errors import ArithmeticNotBuiltError

__all__ = ["Arithmetic", "arithmetic_named"]

Rounding = Literal["nearest", "zero", "up", "down", "stochastic"]
Subnormals = Literal["kept", "flushed"]

_EXACT_INTEGERS = 2**53


@dataclass(frozen=True, slots=True, kw_only=True)
class Arithmetic:
    """Rounds every elementary operation as `format` does; everything but nearest, kept, unfused is refused.

    Operands are carriers: arrays or scalars of `format.carrier` that hold values of the format, and Python
    numbers from `constant`.
    """

    format: Format
    rounding: Rounding = "nearest"
    subnormals: Subnormals = "kept"
    fused: bool = False
    _constants: dict[tuple[type, Any], Any] = field(default_factory=dict, compare=False, repr=False)

    def __post_init__(self) -> None:
        """Refuse by name what is not built."""
        if self.rounding != "nearest":
            raise ArithmeticNotBuiltError(f"rounding = {self.rounding!r} is not built yet; accepted: 'nearest'")
        if self.subnormals != "kept":
            raise ArithmeticNotBuiltError(f"subnormals = {self.subnormals!r} is not built yet; accepted: 'kept'")
        if self.fused:
            raise ArithmeticNotBuiltError("fused = True is not built yet; accepted: False")

    def apply(
        self,
        ufunc: np.ufunc,
        operands: Sequence[Any],
        out: Floats | None = None,
        call: Callable[..., Any] | None = None,
    ) -> Any:
        """Compute `ufunc` on carriers and round the result once; a carrier array, a scalar, or booleans.

        `out` is a carrier array that receives the result. `call` is what plain code would have called instead
        of the ufunc (a Python operator, also an in-place one whose target is the first operand): it is used
        wherever the operation takes place in the carrier, so that float64 gives plain code's bits.
        Raises KeyError for a ufunc that `elementary.WAYS` does not list.
        """
        way = WAYS[ufunc]
        if self.format.native or way in ("exact", "truth", "carrier"):
            if call is not None:
                result = call(*operands)
            else:
                result = ufunc(*operands) if out is None else ufunc(*operands, out=out)
            if self.format.native:
                return result if way == "truth" else self._same_type(result)
            return self._rounded(result) if way == "carrier" else result
        if way == "table":
            (operand,) = operands
            found = look_up(ufunc, operand, self.format, out)
            return found if isinstance(found, np.ndarray) and found.ndim else found[()]
        result = narrow(compute_wide(ufunc, operands, self.format), self.format)
        if out is not None:
            out[...] = result
            return out
        return result if result.ndim else result[()]

    def constant(self, number: float | np.generic) -> Any:
        """Return a weak scalar as it meets the state: rounded once, a Python number that NumPy takes as weak.

        float64 leaves it as it is, so that plain code's own shortcuts (`x ** 2`) are taken.
        """
        if self.format.name == "float64":
            return number
        key = (type(number), number)
        known = self._constants.get(key)
        if known is None or number == 0:  # 0.0 and -0.0 are one key; neither needs rounding
            integral = isinstance(number, (int, np.integer))
            known = narrow_integer(int(number), self.format) if integral else narrow_number(float(number), self.format)
            if len(self._constants) < 4096:  # a kernel that feeds a new constant each step must not fill memory
                self._constants[key] = known
        return known

    def cast(self, values: npt.NDArray[Any]) -> Floats:
        """Return a real array of any kind rounded once to the format, as a new carrier array.

        Raises ValueError for integers beyond 2^53 and for types that float64 does not hold exactly.
        """
        if _past_exact_integers(values):
            raise ValueError("integers beyond 2**53 cannot be rounded once; accepted: up to 2**53")
        if values.dtype.kind not in "biuf" or values.dtype.itemsize > 8:
            raise ValueError(f"dtype {values.dtype} cannot be rounded; accepted: booleans, integers, floats to 64 bits")
        return narrow(values.astype(np.float64), self.format)

    def holds(self, values: npt.NDArray[Any]) -> bool:
        """Whether every value of a real array is one of the format's already (NaN is)."""
        if _past_exact_integers(values):
            return False
        wide = values.astype(np.float64)
        return bool(np.array_equal(narrow(wide, self.format).astype(np.float64), wide, equal_nan=True))

    def _rounded(self, result: Any) -> Any:
        if isinstance(result, np.ndarray):
            return round_carrier(result, self.format)
        return round_carrier(np.array([result], self.format.carrier), self.format)[0]

    def _same_type(self, result: Any) -> Any:
        """Round what a native operation widened: a Python scalar function, or one that knows float64 only."""
        if getattr(result, "dtype", None) == self.format.storage or self.format.name == "float64":
            return result
        return narrow(np.asarray(result, np.float64), self.format)[()]


def arithmetic_named(name: str) -> Arithmetic:
    """Return the arithmetic of a format: to nearest, subnormals kept, nothing fused."""
    return Arithmetic(format=format_named(name))


def _past_exact_integers(values: npt.NDArray[Any]) -> bool:
    """Whether an array holds integers that float64 may not have."""
    if values.dtype.kind not in "iu" or values.size == 0:
        return False
    return max(abs(int(values.min())), abs(int(values.max()))) > _EXACT_INTEGERS
