"""A format whose values lie in float64 carriers, so that they can meet values that no narrower carrier holds.

It serves runs in which single lines of a kernel have a format of their own (`dispatch/byline.py`). An operation is
computed in float64 on its operands as they are and its result is rounded once. On operands of the format that is what
the format's own arithmetic does: 53 >= 2 x 24 + 2 bits make the first rounding of + - * / and the square root innocuous
(rounding.py has the source). On operands that the format does not hold it is one operation whose result is stored.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.arithmetic.formats import Format
from narrowgauge.arithmetic.rounding import Floats, narrow, narrow_number

__all__ = ["ROUNDS_NOTHING", "InDouble"]

ROUNDS_NOTHING = frozenset(("exact", "truth"))  # the ways whose result is one of the operands, or a boolean


class InDouble(Arithmetic):
    """Rounds to nearest in a format narrower than float64; operands and results are float64 arrays or scalars."""

    _narrow: Format

    def __init__(self, form: Format) -> None:
        object.__setattr__(self, "_narrow", form)  # arithmetics are frozen
        super().__init__(format=replace(form, name=f"{form.name} in float64", carrier=np.dtype(np.float64)))
        self.direct.clear()

    @property
    def native(self) -> bool:
        """The carrier's own operations are not this arithmetic's."""
        return False

    def apply(
        self,
        ufunc: np.ufunc,
        operands: Sequence[Any],
        out: Floats | None = None,
        call: Callable[..., Any] | None = None,
    ) -> Any:
        """Compute `ufunc` in float64 and round the result once; `call` is passed over, its bits are not wanted.

        Raises KeyError for a ufunc that `elementary.WAYS` does not list.
        """
        found = ufunc(*operands)
        if WAYS[ufunc] not in ROUNDS_NOTHING:
            found = self.cast(found) if isinstance(found, np.ndarray) else self._one(float(found))
        if out is None:
            return found
        out[...] = found
        return out

    def cast(self, values: npt.NDArray[Any]) -> Floats:
        """Return a real array rounded once to the format, a new float64 array; raises what `Arithmetic.cast` does."""
        if values.dtype != np.float64:
            return super().cast(values).astype(np.float64)
        return narrow(values, self._narrow).astype(np.float64)

    def _one(self, number: float) -> np.float64:
        return np.float64(narrow_number(number, self._narrow))
