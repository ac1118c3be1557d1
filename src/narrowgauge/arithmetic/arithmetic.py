"""An arithmetic: format, rounding mode, subnormals kept or flushed, products fused into sums or not."""

from __future__ import annotations

import operator
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import partial
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic import compiled, double, errorterms
from narrowgauge.arithmetic.elementary import Manner, compute_wide, look_up, look_up_wide, ways
from narrowgauge.arithmetic.formats import Format, format_named
from narrowgauge.arithmetic.rounding import (
    Doubles,
    Floats,
    Rounding,
    carrier_rounding,
    flush,
    narrow,
    narrow_integer,
    narrow_number,
    one_pass,
    round_carrier,
    round_half,
)
from narrowgauge.arithmetic.stochastic import Stochastic

__all__ = ["Arithmetic", "Rounding", "Subnormals", "arithmetic_named"]

Subnormals = Literal["kept", "flushed"]

_EXACT_INTEGERS = 2**53
_MOST_CONSTANTS = 4096  # a kernel that feeds a new constant each step must not fill memory
_FRESH = frozenset((operator.add, operator.sub, operator.mul, operator.truediv))  # make a new array, as the ufunc does
_APART = frozenset(("table", "wide", "terms"))  # what does not take place in the carrier


@dataclass(frozen=True, slots=True, kw_only=True)
class Arithmetic:
    """Rounds every elementary operation as `format` does, from the exact result and never from a rounded one.

    Operands are carriers: arrays or scalars of `format.carrier` that hold values of the format, and Python
    numbers from `constant`.

    `rounding`: nearest (ties to even), toward zero, up, down, or stochastic: to one of the two neighbours, to the
    nearer with more probability, unbiased; that takes a `stream` of random numbers, one for each run of a kernel. A sum
    that is exactly zero is -0 when rounding down. `subnormals`: kept, or flushed as rounding.py says. `fused`: the
    caller is to hand products that feed sums to `fma`, which rounds them together once; `apply` sees one operation at a
    time and rounds each, fused or not.

    Functions of one operand are right in every mode for every input of the formats of 8 and 16 bits. All others are
    computed in float64 and rounded once (elementary.py says what is known of them), but float32 to nearest and float64
    in every mode have the library's own.
    """

    format: Format
    rounding: Rounding = "nearest"
    subnormals: Subnormals = "kept"
    fused: bool = False
    stream: Stochastic | None = field(default=None, compare=False)
    _constants: dict[tuple[type, Any], Any] = field(default_factory=dict, compare=False, repr=False)
    direct: dict[np.ufunc, Callable[..., Any]] = field(default_factory=dict, init=False, compare=False, repr=False)
    """What computes and rounds an operation on carrier arrays as `apply` does, called as the ufunc is, also with `out`.

    Only to nearest with subnormals kept and nothing fused, and not for every ufunc. At least one operand is an array;
    numbers come from `weak`.
    """
    _ways: dict[np.ufunc, Manner] = field(init=False, compare=False, repr=False)
    _weak: dict[float | str, Any] = field(default_factory=dict, init=False, compare=False, repr=False)

    def __post_init__(self) -> None:
        """Choose how each function is computed."""
        if (self.rounding == "stochastic") != (self.stream is not None):
            raise ValueError(
                "stochastic rounding, and it alone, takes a stream; accepted: Stochastic(seed, level, block)"
            )
        object.__setattr__(self, "_ways", ways(self.format, self.rounding))
        if not self.native:  # numba is imported here at the latest, not inside a kernel's run
            compiled.kernel("nearest")
            if not self.format.native and not self.format.shift:
                self._in_carrier(np.add)
        if self.rounding == "nearest" and self.subnormals == "kept" and not self.fused:
            self.direct.update(self._directly())

    @property
    def native(self) -> bool:
        """Whether the carrier's own operations are this arithmetic's, so that NumPy may compute as it likes."""
        return self.format.native and self.rounding == "nearest" and self.subnormals == "kept" and not self.fused

    def apply(
        self,
        ufunc: np.ufunc,
        operands: Sequence[Any],
        out: Floats | None = None,
        call: Callable[..., Any] | None = None,
    ) -> Any:
        """Compute `ufunc` on carriers and round the result once; a carrier array, a scalar, or booleans.

        `out` is a carrier array that receives the result. `call` is what plain code would have called instead
        of the ufunc (a Python operator, also an in-place one whose target is the first operand and `out`): it is used
        wherever the operation takes place in the carrier, so that float64 gives plain code's bits.
        Raises KeyError for a ufunc that `elementary.WAYS` does not list.
        """
        way = self._ways[ufunc]
        if way in _APART:
            return self._delivered(self._computed(way, ufunc, operands, out), out)
        arrays = type(operands[0]) is np.ndarray or type(operands[-1]) is np.ndarray
        if way == "carrier" and arrays and (call is None or out is not None or call in _FRESH):
            compute = self.direct.get(ufunc) or self._in_carrier(ufunc)
            result = compute(*operands, out=out)
            return result if self.subnormals == "kept" else self._flushed(result)
        if call is not None:
            result = call(*operands)
        elif out is None:
            result = ufunc(*operands)
        else:
            result = ufunc(*operands, out=out)
        if way == "carrier":
            result = self._rounded(result)
        elif way == "native":
            result = self._same_type(result)
        elif way == "truth":
            return result
        return result if self.subnormals == "kept" else self._flushed(result)

    def fma(self, x: Any, y: Any, z: Any, out: Floats | None = None) -> Any:
        """Return x y + z rounded once from the exact value, of carriers; into `out` if given.

        A difference is `fma(x, y, -z)` or `fma(-x, y, z)`: changing a sign is exact. Which products of a kernel feed
        which sums is for the caller to find: it keeps a product unrounded by keeping its two operands.
        """
        if self.format.precision == 53:
            found = double.fused(x, y, z, self.rounding, self._uniforms)
            result: Floats = flush(found, self.format) if self.subnormals == "flushed" else found
        else:
            result = self._narrowed(errorterms.fused(x, y, z, negative_zero=self.rounding == "down"))
        return self._delivered(result, out)

    def constant(self, number: float | np.generic) -> Any:
        """Return a weak scalar as it meets the state: rounded once, a Python number that NumPy takes as weak.

        To nearest in every mode but the directed ones. float64 leaves a number as it is, so that plain code's own
        shortcuts (`x ** 2`) are taken, unless a directed mode has to round it: an integer that it does not hold.
        """
        if self.format.name == "float64" and self.subnormals == "kept" and not self._to_round(number):
            return number
        key = (type(number), number)
        known = self._constants.get(key)
        if known is None or number == 0:  # 0.0 and -0.0 are one key; neither needs rounding
            mode: Rounding = "nearest" if self.rounding == "stochastic" else self.rounding
            flushed = self.subnormals == "flushed"
            if isinstance(number, (int, np.integer)):
                known = narrow_integer(int(number), self.format, mode, flushed=flushed)
            else:
                known = narrow_number(float(number), self.format, mode, flushed=flushed)
            if len(self._constants) < _MOST_CONSTANTS:
                self._constants[key] = known
        return known

    def weak(self, number: float | np.float64) -> Any:
        """Return a constant for `direct`: an array without axes, which NumPy takes faster than a Python number.

        float64 leaves it as it is.
        """
        key = number or repr(float(number))  # 0.0 and -0.0 are equal
        known = self._weak.get(key)
        if known is None:
            if self.format.name == "float64":
                return number
            known = np.array(self.constant(number), self.format.carrier)
            known.setflags(write=False)
            if len(self._weak) < _MOST_CONSTANTS:
                self._weak[key] = known
        return known

    def cast(self, values: npt.NDArray[Any]) -> Floats:
        """Return a real array of any kind rounded once to the format, as a new carrier array.

        To nearest in every mode but the directed ones.
        Raises ValueError for integers beyond 2^53 and for types that float64 does not hold exactly.
        """
        if _past_exact_integers(values):
            raise ValueError("integers beyond 2**53 cannot be rounded once; accepted: up to 2**53")
        if values.dtype.kind not in "biuf" or values.dtype.itemsize > 8:
            raise ValueError(f"dtype {values.dtype} cannot be rounded; accepted: booleans, integers, floats to 64 bits")
        mode: Rounding = "nearest" if self.rounding == "stochastic" else self.rounding
        wide = values.astype(np.float64, copy=False)
        return narrow(wide, self.format, mode, flushed=self.subnormals == "flushed")

    def constants(self, values: npt.NDArray[Any]) -> Floats:
        """Return a plain array as it meets the state: what `cast` returns, unless lines have formats of their own."""
        return self.cast(values)

    def holds(self, values: npt.NDArray[Any]) -> bool:
        """Whether every value of a real array is one of the arithmetic's already (NaN is)."""
        if _past_exact_integers(values):
            return False
        wide = values.astype(np.float64)
        own = narrow(wide, self.format, flushed=self.subnormals == "flushed").astype(np.float64)
        return bool(np.array_equal(own, wide, equal_nan=True))

    def _directly(self) -> dict[np.ufunc, Callable[..., Any]]:
        """Return the rows of `direct`."""
        found: dict[np.ufunc, Callable[..., Any]] = {}
        kind = self.format.carrier.char
        for ufunc, way in self._ways.items():
            if way == "carrier":
                found[ufunc] = partial(self._first, ufunc)
            elif way == "table":
                found[ufunc] = partial(self._looked_up, ufunc)
            elif way in ("exact", "truth", "native") and any(row.startswith(kind) for row in ufunc.types):
                found[ufunc] = ufunc
        return found

    def _first(self, ufunc: np.ufunc, *operands: Any, out: Floats | None = None) -> Any:
        """Compute, and leave in `direct` what computes from now on: what is not asked for is not loaded."""
        self.direct[ufunc] = self._in_carrier(ufunc)
        return self.direct[ufunc](*operands, out=out)

    def _in_carrier(self, ufunc: np.ufunc) -> Callable[..., Any]:
        """Return what computes an operation in the carrier, one operand an array, and rounds the result."""
        found = one_pass(self.format, ufunc)
        if found is not None:
            return found
        rounding = carrier_rounding(self.format)

        def compute(*operands: Any, out: Floats | None = None) -> Any:
            result = ufunc(*operands, out=out)
            return rounding(result) if type(result) is np.ndarray and result.size else self._rounded(result)

        return compute

    def _looked_up(self, ufunc: np.ufunc, operand: Floats, *, out: Floats | None = None) -> Any:
        return self._delivered(look_up(ufunc, operand, self.format, out), out)

    def _computed(self, way: Manner, ufunc: np.ufunc, operands: Sequence[Any], out: Floats | None) -> Floats:
        """Compute what does not take place in the carrier."""
        if way == "table" and self.rounding != "stochastic":
            flushed = self.subnormals == "flushed"
            return look_up(ufunc, operands[0], self.format, out, self.rounding, flushed=flushed)
        if way == "terms" and self.format.precision == 53:
            found: Floats = double.computed(ufunc, operands, self.rounding, self._uniforms)
            return flush(found, self.format) if self.subnormals == "flushed" else found
        if way == "terms":
            return self._narrowed(errorterms.exact(ufunc, operands, negative_zero=self.rounding == "down"))
        if ufunc.nin == 1 and self.rounding != "nearest":
            return self._narrowed(look_up_wide(ufunc, operands[0], self.format))
        return self._narrowed(np.asarray(compute_wide(ufunc, operands, self.format, self.rounding)))

    def _narrowed(self, values: Doubles) -> Floats:
        drawn = self._uniforms(values.shape) if self.rounding == "stochastic" else None
        flushed = self.subnormals == "flushed"
        return narrow(values, self.format, self.rounding, flushed=flushed, uniforms=drawn)

    def _uniforms(self, shape: tuple[int, ...]) -> Doubles:
        assert self.stream is not None  # checked when the arithmetic was made
        return self.stream.uniforms(shape)

    def _delivered(self, found: Floats, out: Floats | None) -> Any:
        if out is None:
            return found if found.ndim else found[()]
        if out is not found:
            out[...] = found
        return out

    def _rounded(self, result: Any) -> Any:
        if isinstance(result, np.ndarray):
            return round_carrier(result, self.format)
        if self.format.name == "float16":
            return round_half(float(result))
        return np.float32(narrow_number(float(result), self.format))

    def _flushed(self, result: Any) -> Any:
        if isinstance(result, np.ndarray):
            return flush(result, self.format)
        return flush(np.array([result], self.format.carrier), self.format)[0]

    def _to_round(self, number: float | np.generic) -> bool:
        """Whether float64 in a directed mode does not take a number as it is."""
        if self.rounding in ("nearest", "stochastic") or not isinstance(number, (int, np.integer)):
            return False
        return abs(int(number)) > _EXACT_INTEGERS

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
