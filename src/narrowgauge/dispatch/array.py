"""The duck array: a carrier with one door in and one door out, not an ndarray subclass.

`dtype` says float64 and `__class__` says np.ndarray, so that the kernel takes the decisions it takes today. Views
share the carrier's memory as NumPy's do; booleans and integers that come out of it are exact values.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import numpy as np

from narrowgauge.dispatch.exact import Exact, bare
from narrowgauge.dispatch.scalar import Scalar, State, plain_item, refuse_attribute
from narrowgauge.dispatch.setting import Setting, Wrapped, holds
from narrowgauge.dispatch.shortcuts import with_shortcuts
from narrowgauge.errors import RefusedError

__all__ = ["Array", "Constant", "Flat", "as_state", "carrier_of", "changing", "constant", "stored", "wrap"]


@with_shortcuts
class Array(State):
    """An array of values of the state, in a float32 or float64 carrier of the same shape and strides.

    `_plain` is there in a Constant only; the slot is here so that a constant that is written to can become an array.
    """

    __slots__ = ("_plain",)

    # isinstance(x, np.ndarray) must decide as it does in plain code
    __class__ = np.ndarray  # type: ignore[assignment]

    def __imatmul__(self, other: Any) -> Any:
        self[...] = self @ other
        return self

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of the carrier."""
        return self._carrier.shape  # type: ignore[no-any-return]

    @property
    def ndim(self) -> int:
        """Number of axes."""
        return self._carrier.ndim  # type: ignore[no-any-return]

    @property
    def size(self) -> int:
        """Number of values."""
        return self._carrier.size  # type: ignore[no-any-return]

    @property
    def flags(self) -> Any:
        """Memory flags of the carrier."""
        return self._carrier.flags

    @property
    def T(self) -> Array:  # noqa: N802  # NumPy's name
        """Transposed view."""
        return Array(self._carrier.T, self._setting)

    @property
    def real(self) -> Array:
        """The array itself."""
        return self

    def __len__(self) -> int:
        return len(self._carrier)

    def __iter__(self) -> Iterator[Any]:
        return map(self._setting.wrap, self._carrier)

    def __contains__(self, value: Any) -> bool:
        return bool((self == value).any())

    def __getitem__(self, key: Any) -> Any:
        return wrap(self._carrier[self._key(key)], self._setting)

    def __setitem__(self, key: Any, value: Any) -> None:
        self._carrier[self._key(key)] = stored(value, self._setting)

    def __repr__(self) -> str:
        self._setting.leave("text")
        return f"{self._carrier!r} in {self._setting.arithmetic.format.name}"

    def __str__(self) -> str:
        self._setting.leave("text")
        return str(self._carrier)

    def __copy__(self) -> Array:
        return self.copy("K")

    def __deepcopy__(self, memo: object) -> Array:
        return self.copy("K")

    def copy(self, order: Any = "C") -> Array:
        """Return a copy, as ndarray.copy."""
        return Array(self._carrier.copy(order), self._setting)

    def astype(
        self, dtype: Any, order: Any = "K", casting: Any = "unsafe", subok: bool = True, copy: bool = True
    ) -> Any:
        """Return a copy for float64, exact values for integers and booleans; other floats are refused."""
        if self._setting.float_dtype(dtype) is None:
            return wrap(self._carrier.astype(dtype, order=order, casting=casting, copy=copy), self._setting)
        return Array(self._carrier.astype(self._carrier.dtype, order=order, copy=copy), self._setting)

    def reshape(self, *shape: Any, order: Any = "C") -> Array:
        """Return the values in another shape, a view where NumPy gives one."""
        return Array(self._carrier.reshape(*shape, order=order), self._setting)

    def flatten(self, order: Any = "C") -> Array:
        """Return a copy of the values in one axis."""
        return Array(self._carrier.flatten(order), self._setting)

    def transpose(self, *axes: Any) -> Array:
        """Return a view with its axes in another order."""
        return Array(self._carrier.transpose(*axes), self._setting)

    def item(self, *place: Any) -> Any:
        """Return one value as a 0-d value, held as plain code would hold it."""
        place_of_all = np.arange(self.size).reshape(self.shape)  # so that NumPy reads the place, and refuses it
        return wrap(plain_item(self._carrier.flat[place_of_all.item(*place)]), self._setting)

    def fill(self, value: Any) -> None:
        """Set every value."""
        self[...] = value

    def sort(self, axis: Any = -1, kind: Any = None, order: Any = None, **keywords: Any) -> None:
        """Sort in place."""
        if order is not None:
            raise self._setting.fault(RefusedError, "order= of .sort is not offered by this version")
        self._carrier.sort(axis, kind, **keywords)

    def partition(self, kth: Any, axis: Any = -1, kind: Any = "introselect") -> None:
        """Partition in place."""
        self._carrier.partition(bare(kth, self._setting), axis, kind)

    def tolist(self) -> Any:
        """Return nested lists of 0-d values, each held as plain code would hold it; one of no axes as such a value."""
        return _listed(self._carrier, self._setting)

    @property
    def flat(self) -> Flat:
        """The values in C order, to be read and written one by one."""
        return Flat(self)

    @flat.setter
    def flat(self, value: Any) -> None:
        changing(self)
        self._carrier.flat = stored(value, self._setting)

    def __getattr__(self, name: str) -> Any:
        return refuse_attribute(self, name, np.ndarray)

    def _key(self, key: Any) -> Any:
        kind = type(key)
        if kind is int or kind is slice:  # most of them
            return key
        if not holds(key, Wrapped):
            return key
        if holds(key, State):
            raise self._setting.fault(RefusedError, "a value of the state as an index; accepted: integers, booleans")
        return bare(key, self._setting)


class Flat:
    """What `.flat` of an array is: its values in C order, whatever its layout, in its own memory."""

    __slots__ = ("base",)

    __class__ = np.flatiter  # type: ignore[assignment]

    def __init__(self, base: Array) -> None:
        changing(base)
        self.base = base

    def __len__(self) -> int:
        return self.base.size

    def __iter__(self) -> Iterator[Any]:
        return map(self.base._setting.wrap, self.base._carrier.flat)

    def __getitem__(self, key: Any) -> Any:
        return self.base._setting.wrap(self.base._carrier.flat[self.base._key(key)])

    def __setitem__(self, key: Any, value: Any) -> None:
        self.base._carrier.flat[self.base._key(key)] = stored(value, self.base._setting)

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> Any:
        return self.copy().__array__(dtype, copy)

    def copy(self) -> Array:
        """Return the values as an array of one axis."""
        return self.base.flatten()


def _listed(carrier: Any, setting: Setting) -> Any:
    if carrier.ndim == 0:
        return wrap(plain_item(carrier[()]), setting)
    if carrier.ndim > 1:
        return [_listed(row, setting) for row in carrier]
    return [Scalar(plain_item(value), setting) for value in carrier]


class Constant(Array):
    """An array that was made of plain numbers alone, and knows them until it, or a view of it, can have been changed.

    What does not know the emulation (an interpolation of SciPy's) gets the plain numbers: they are constants, as if the
    kernel had handed them over without making an array. In operations it is an array like any other. Whatever writes,
    or gives a view, makes it one for good.
    """

    __slots__ = ()

    def __init__(self, carrier: Any, setting: Setting, plain: Any = None) -> None:
        """Take the numbers, float64, that the carrier holds rounded: an array that nobody else writes to, or one."""
        self._carrier, self._setting, self._plain = carrier, setting, plain

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> Any:
        plain = np.empty_like(self._carrier, np.float64)
        plain[...] = np.nan if self._plain is None else self._plain  # unpickled: the numbers were not written along
        if not np.array_equal(self._setting.arithmetic.constants(plain), self._carrier, equal_nan=True):
            return super().__array__(dtype, copy)
        return plain if dtype is None else plain.astype(dtype)

    def __getitem__(self, key: Any) -> Any:
        found = super().__getitem__(key)
        if isinstance(found, Array) and found._carrier.base is not None:
            changing(self)
        return found

    def __iter__(self) -> Iterator[Any]:
        if self.ndim > 1:
            changing(self)
        return Array.__iter__(self)

    def copy(self, order: Any = "C") -> Array:
        """Return a copy that knows the numbers, too."""
        return Constant(self._carrier.copy(order), self._setting, self._plain)


def _changed(name: str) -> Any:
    """Return a method or property of the array for a constant: it makes an array of it first."""
    method: Any = vars(Array)[name]
    call: Callable[..., Any] = getattr(method, "fget", method)

    def changed(self: Array, *arguments: Any, **keywords: Any) -> Any:
        changing(self)
        return call(self, *arguments, **keywords)

    return property(changed) if isinstance(method, property) else changed


for _name in (
    "__iadd__", "__isub__", "__imul__", "__itruediv__", "__ifloordiv__", "__imod__", "__ipow__", "__setitem__",
    "T", "flags", "partition", "reshape", "sort", "transpose",
):  # fmt: skip
    setattr(Constant, _name, _changed(_name))

_KIND: Any = vars(object)["__class__"]  # the arrays' own __class__ is what isinstance() sees


def changing(value: Any) -> None:
    """Make an array like any other of a constant that is about to be written to, or to be seen through a view."""
    if type(value) is Constant:
        del value._plain
        _KIND.__set__(value, Array)


def wrap(result: Any, setting: Setting) -> Any:
    """Return a carrier as an array, a 0-d value or an exact value; lists and tuples item by item, the rest as it is."""
    if isinstance(result, np.ndarray):
        kind = result.dtype.kind
        return Array(result, setting) if kind == "f" else Exact(result, setting) if kind in "biu" else result
    if isinstance(result, (float, np.floating)):
        return Scalar(result, setting)
    if isinstance(result, (int, np.integer, np.bool_)):
        return Exact(result, setting)
    if isinstance(result, (list, tuple)):
        items = [wrap(item, setting) for item in result]
        if isinstance(result, list):
            return items
        return result._make(items) if hasattr(result, "_make") else tuple(items)
    return result


def as_state(value: Any, setting: Setting | None) -> Any:
    """Return a parameter as the kernel gets it: a copy of a plain float array as an array of the state, rounded once.

    A table that is indexed by places or masks of the state then gives numbers of the state. Numbers, integers and
    anything else, and everything in plain NumPy (`setting` None), are returned as they are.
    """
    if setting is None or not isinstance(value, np.ndarray) or isinstance(value, Wrapped) or value.dtype.kind != "f":
        return value
    return constant(value, setting)


def constant(value: np.ndarray[Any, Any], setting: Setting, *, kept: bool = False) -> Constant:
    """Return a plain float array as constants of the state, in memory of its own, rounded once.

    `kept`: nobody else has the array, so that it need not be copied.
    """
    carrier = setting.admit(value)
    own = carrier.copy("K") if carrier is value else carrier
    return Constant(own, setting, value if kept else value.astype(np.float64))


def carrier_of(value: Any, setting: Setting) -> Any:
    """Return the carrier of a value or of a nest of lists, constants rounded; RefusedError for a foreign type."""
    if isinstance(value, (list, tuple)):
        if not holds(value, State):
            return setting.admit(np.asarray(bare(value, setting)))
        return np.array([carrier_of(item, setting) for item in value], dtype=setting.arithmetic.format.carrier)
    carrier = setting.admit(value)
    if carrier is NotImplemented:
        raise setting.strange(value)
    return carrier


def stored(value: Any, setting: Setting) -> Any:
    """Return the carrier of what is stored into a buffer; a plain float array is checked, never rounded silently.

    On a line that may let values leave it is rounded as constants are: values that left come back that way.
    """
    if (
        isinstance(value, np.ndarray)
        and not isinstance(value, Wrapped)
        and value.dtype.kind == "f"
        and not setting.arithmetic.holds(value)
    ):
        setting.escape(
            f"a plain float array is stored whose values {setting.arithmetic.format.name} does not have; "
            "accepted: np.asarray(values), which rounds constants",
        )
    return carrier_of(value, setting)
