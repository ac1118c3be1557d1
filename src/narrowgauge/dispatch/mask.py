"""Booleans that depend on the state: comparisons, and boolean arrays that the kernel makes.

Booleans and integers are exact, so that nothing is rounded here until a mask meets a number that is not an integer:
`0.95 * (S > K)` is a value of the state like any other, its constant rounded. A plain boolean array would make a
plain float array of it, and a sum of two of those would never be rounded.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.lib.mixins import NDArrayOperatorsMixin

from narrowgauge.dispatch.setting import Setting, Wrapped
from narrowgauge.errors import RefusedError

__all__ = ["Mask", "as_number", "bare", "is_exact", "settled"]


class Mask(Wrapped, NDArrayOperatorsMixin):
    """A boolean array, or one boolean, that depends on the state; it indexes, counts and selects as plain ones do.

    Operators become NumPy's ufuncs. Integers that come out are plain.
    """

    __slots__ = ()

    @property  # type: ignore[misc]  # what isinstance() sees: the plain type
    def __class__(self) -> Any:
        return type(self._carrier)

    def __hash__(self) -> int:
        return hash(self._carrier)  # raises TypeError for an array, as ndarray does

    def __bool__(self) -> bool:
        return self._setting.decide(self._carrier)

    def __int__(self) -> int:
        return int(self._carrier)

    def __float__(self) -> float:
        return float(self._carrier)  # 0.0 or 1.0, which every format has

    def __index__(self) -> int:
        return self._carrier.__index__()  # type: ignore[no-any-return]  # a Python boolean has one

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> np.ndarray[Any, Any]:
        return np.array(self._carrier, dtype, copy=copy)

    def __len__(self) -> int:
        return len(self._carrier)

    def __iter__(self) -> Iterator[Any]:
        return map(self._setting.wrap, self._carrier)

    def __contains__(self, value: Any) -> bool:
        return bool(bare(value, self._setting) in self._carrier)

    def __getitem__(self, key: Any) -> Any:
        return self._setting.wrap(self._carrier[bare(key, self._setting)])

    def __setitem__(self, key: Any, value: Any) -> None:
        self._carrier[bare(key, self._setting)] = self._setting.admit(value)

    def __copy__(self) -> Mask:
        return Mask(np.copy(self._carrier)[()], self._setting)

    def __deepcopy__(self, memo: object) -> Mask:
        return self.__copy__()

    def __repr__(self) -> str:
        return repr(self._carrier)

    def __str__(self) -> str:
        return str(self._carrier)

    def __format__(self, specification: str) -> str:
        return format(self._carrier, specification)

    def astype(self, dtype: Any, **keywords: Any) -> Any:
        """Return 0.0 and 1.0 of the state for float64, plain integers, or a mask; other floats are refused."""
        if self._setting.float_dtype(dtype) is not None:
            return as_number(self, self._setting)
        return self._setting.wrap(self._carrier.astype(dtype, **keywords))

    def __getattr__(self, name: str) -> Any:
        if name.startswith("__"):
            raise AttributeError(f"{self.__class__.__name__!r} object has no attribute {name!r}")
        found = getattr(self._carrier, name)
        if not callable(found):
            return settled(found, f".{name}", self._setting)

        def method(*arguments: Any, **keywords: Any) -> Any:
            result = found(*bare(arguments, self._setting), **bare(keywords, self._setting))
            return settled(result, f".{name}", self._setting)

        return method


def bare(value: Any, setting: Setting) -> Any:
    """Return a value with the masks in a nest of lists, tuples and dictionaries exchanged for plain booleans."""
    if isinstance(value, (list, tuple)):
        items = [bare(item, setting) for item in value]
        return items if isinstance(value, list) else tuple(items)
    if isinstance(value, dict):
        return {key: bare(item, setting) for key, item in value.items()}
    return setting.admit(value) if isinstance(value, Mask) else value


def is_exact(value: Any, setting: Setting) -> bool:
    """Whether a value that holds no number of the state is of booleans or integers, plain or in masks."""
    return np.asarray(bare(value, setting)).dtype.kind in "biu"


def as_number(value: Any, setting: Setting) -> Any:
    """Return a mask as 0.0 and 1.0 of the state; any other value as it is."""
    if not isinstance(value, Mask):
        return value
    carrier = setting.admit(value)
    return setting.wrap(np.asarray(carrier).astype(setting.arithmetic.format.carrier)[()])


def settled(result: Any, name: str, setting: Setting) -> Any:
    """Return what NumPy made of masks alone: booleans as masks, integers as they are; floats are refused by name."""
    if isinstance(result, (list, tuple)):
        items = [settled(item, name, setting) for item in result]
        return items if isinstance(result, list) else tuple(items)
    if isinstance(result, float) or (isinstance(result, (np.ndarray, np.generic)) and result.dtype.kind not in "biu"):
        raise setting.fault(RefusedError, f"{name} of booleans gives numbers that this version cannot round")
    return setting.wrap(result)
