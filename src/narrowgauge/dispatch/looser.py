"""Settings in which a line of a kernel is computed as a compiler may: products fused into sums, or wider intermediates.

An operation is rounded as ever where its result leaves the expression: where it is stored, returned, or handed to
anything but + - * / and a change of sign. Within the expression what it was made of is remembered, and the next
operation starts from there. That is how C computes with products contracted or with excess precision, ISO/IEC
9899:2018, 5.2.4.2.2 and 6.5 (recalled from memory); a Python expression is told by the instructions between two
operations, of which none stores.
"""

from __future__ import annotations

import dis
from bisect import bisect_right
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import lru_cache
from types import CodeType
from typing import Any, Literal

import numpy as np

from narrowgauge.dispatch.setting import Place, Route, Setting

__all__ = ["LooserSetting", "Manner"]

_KEPT = (np.add, np.subtract, np.multiply, np.divide, np.negative)
_MOST = 512  # results remembered


@dataclass(frozen=True, slots=True)
class Manner:
    """How a line is computed.

    `fused`: a product that feeds a sum is not rounded; of two, the first, or the last on the lines of `last`; `across`
    lines, too. `wider`: all intermediates of an expression in the format `wide`, float32 or float64, and rounded once.
    `only`: on one line alone.
    """

    kind: Literal["fused", "wider"]
    last: frozenset[Place | None] = frozenset()
    across: bool = False
    wide: Literal["float32", "float64"] = "float64"
    only: Place | None = None


@dataclass(frozen=True, slots=True)
class _Kept:
    """A rounded result with what it was made of: the factors of a product, or the wider value."""

    rounded: Any
    frame: int
    code: CodeType | None
    at: int
    parts: tuple[Any, ...]


class LooserSetting(Setting):
    """A setting whose sums and products are those of a manner.

    `of_two` are the lines that added two products of which either could have been fused; `crossed` says whether one
    operation started from what another line had stored, which takes a manner `across`. Nothing else that is asked of
    a manner changes from run to run: another of its kind that says the same of these gives the same bits.
    """

    __slots__ = ("_kept", "_manner", "crossed", "of_two")

    def __init__(self, *placed: Any, manner: Manner, **named: Any) -> None:
        super().__init__(*placed, **named)
        self.direct = {}
        self._manner = manner
        self.of_two: dict[Place | None, None] = {}
        self.crossed = False
        self._kept: dict[int, _Kept] = {}

    def operate(
        self,
        ufunc: np.ufunc,
        route: Route,
        operands: Sequence[Any],
        *,
        out: Any = None,
        call: Callable[..., Any] | None = None,
    ) -> Any:
        """Compute one operation, from what its operands were made of where it stands in one expression with them."""
        fused, only = self._manner.kind == "fused", self._manner.only
        here = only is None or self.where() == only
        if ufunc not in _KEPT or not (here or fused):
            return super().operate(ufunc, route, operands, out=out, call=call)
        carriers = [self.admit(operand) for operand in operands]
        if any(carrier is NotImplemented for carrier in carriers):
            return NotImplemented
        rounded, parts = self._fused(ufunc, carriers, here) if fused else self._widened(ufunc, carriers)
        if out is not None:
            out[...] = rounded
            return self.wrap(out)
        if parts:
            frame = self.frame()
            at = -1 if frame is None else frame.f_lasti
            code = None if frame is None else frame.f_code
            while len(self._kept) >= _MOST:
                del self._kept[next(iter(self._kept))]
            self._kept[id(rounded)] = _Kept(rounded, id(frame), code, at, parts)
        return self.wrap(rounded)

    def _fused(self, ufunc: np.ufunc, carriers: list[Any], here: bool) -> tuple[Any, tuple[Any, ...]]:
        """Return a result, and the factors of a product; sums are rounded like any operation unless `here`."""
        arithmetic = self.arithmetic
        if here and ufunc in (np.add, np.subtract):
            products = [place for place, carrier in enumerate(carriers) if self._parts(carrier)]
            if products:
                line = self.where()
                if len(products) > 1:
                    self.of_two[line] = None
                place = products[-1 if line in self._manner.last else 0]
                (x, y), other = self._parts(carriers[place]), carriers[1 - place]
                if ufunc is np.subtract:
                    x, other = (x, np.negative(other)) if place == 0 else (np.negative(x), other)
                return arithmetic.fma(x, y, other), ()
        rounded = arithmetic.apply(ufunc, carriers)
        if ufunc is np.multiply:
            return rounded, tuple(carriers)
        known = self._parts(carriers[0]) if ufunc is np.negative else ()
        return rounded, (np.negative(known[0]), known[1]) if known else ()

    def _widened(self, ufunc: np.ufunc, carriers: list[Any]) -> tuple[Any, tuple[Any, ...]]:
        """Return a result rounded once, and the wider value that it was rounded from."""
        values = [(*self._parts(carrier), carrier)[0] for carrier in carriers]
        wide = ufunc(*(np.asarray(value, self._manner.wide) for value in values))
        rounded = self.arithmetic.cast(np.asarray(wide))
        return rounded if rounded.ndim else rounded[()], (wide,)

    def _parts(self, carrier: Any) -> tuple[Any, ...]:
        """Return what an operand was made of, or nothing where it was stored since."""
        known = self._kept.get(id(carrier))
        if known is None or known.rounded is not carrier:
            return ()
        if self._in_expression(known):
            return known.parts
        self.crossed |= self._manner.across and bool(known.parts)
        return known.parts if self._manner.across else ()

    def _in_expression(self, known: _Kept) -> bool:
        """Return whether a result has not been stored, returned or left behind since."""
        frame = self.frame()
        if frame is None or id(frame) != known.frame or frame.f_code is not known.code or frame.f_lasti <= known.at:
            return False
        stores = _stores(frame.f_code)
        return bisect_right(stores, known.at) >= bisect_right(stores, frame.f_lasti)


@lru_cache(maxsize=256)
def _stores(code: CodeType) -> list[int]:
    """Return the places of the instructions of a function that store a value, in order."""
    return [one.offset for one in dis.get_instructions(code) if one.opname.startswith(("STORE_", "RETURN_"))]
