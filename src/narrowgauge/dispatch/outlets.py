"""Stand-ins for modules that write values down: pickle, whose copies stay in the run, and json and decimal, refused.

Without them a private copy's classes, which no import finds, could not be pickled, and the other two would raise
errors that name no line.
"""

from __future__ import annotations

import decimal
import io
import json
import pickle
from collections.abc import Callable
from types import FunctionType, ModuleType
from typing import Any

from narrowgauge.dispatch.namespaces import Namespace
from narrowgauge.dispatch.scalar import Text
from narrowgauge.dispatch.setting import Setting, Wrapped, holds
from narrowgauge.errors import RefusedError

__all__ = ["decimal_namespace", "json_namespace", "pickle_namespace"]


def json_namespace(setting: Setting) -> ModuleType:
    """Return a stand-in for `json` that refuses to write values of the state."""

    def guarded(name: str) -> Callable[..., Any]:
        plain: Callable[..., Any] = getattr(json, name)

        def function(obj: Any, *arguments: Any, **keywords: Any) -> Any:
            if holds(obj, Wrapped):
                raise setting.fault(
                    RefusedError, f"json.{name} of the state writes what nobody rounds; accepted: return the state"
                )
            return plain(obj, *arguments, **keywords)

        return function

    return Namespace(json, {name: guarded(name) for name in ("dump", "dumps")})


def decimal_namespace(setting: Setting) -> ModuleType:
    """Return a stand-in for `decimal` whose Decimal refuses values of the state, and texts that were made of them."""

    class Kind(type(decimal.Decimal)):  # type: ignore[misc]  # its own type, whatever that is
        def __instancecheck__(cls, value: Any) -> bool:
            return isinstance(value, decimal.Decimal)

        def __subclasscheck__(cls, kind: type) -> bool:
            return issubclass(kind, decimal.Decimal)

    class Decimal(decimal.Decimal, metaclass=Kind):
        def __new__(cls, value: Any = "0", context: Any = None) -> Any:
            return decimal.Decimal(admitted(value), context)

        @classmethod
        def from_float(cls, f: Any) -> Any:
            return decimal.Decimal.from_float(admitted(f))

    def admitted(value: Any) -> Any:
        if not isinstance(value, (Wrapped, Text)):
            return value
        setting.escape("decimal.Decimal takes a value out of the emulated arithmetic; accepted: leave it as it is")
        return str.__str__(value) if isinstance(value, Text) else setting.carrier(value).item()

    return Namespace(decimal, {"Decimal": Decimal})


def pickle_namespace(setting: Setting | None, found: Callable[[Any], Any], load: Callable[[str], Any]) -> ModuleType:
    """Return a stand-in for `pickle` that also writes and reads values of the run, and what its copies define.

    `found` gives the function or class of a private copy for one of the same name, `load` a private copy by name.
    What one run wrote, no other one reads.
    """

    class Pickler(pickle.Pickler):
        def persistent_id(self, obj: Any) -> Any:
            if setting is not None and obj is setting:
                return id(setting), ""
            is_named = isinstance(obj, (type, FunctionType)) and found(obj) is obj
            return (obj.__module__, obj.__qualname__) if is_named else None

        def reducer_override(self, obj: Any) -> Any:
            kind = type(obj)
            return (kind, (obj._carrier, obj._setting)) if issubclass(kind, Wrapped) else NotImplemented

    class Unpickler(pickle.Unpickler):
        def persistent_load(self, pid: Any) -> Any:
            home, inside = pid
            if not inside:
                if setting is not None and home == id(setting):
                    return setting
                raise _other_run(setting)
            value: Any = load(home)
            for part in inside.split("."):
                value = getattr(value, part)
            return value

    def dump(obj: Any, file: Any, protocol: Any = None, **options: Any) -> None:
        Pickler(file, protocol, **options).dump(obj)

    def dumps(obj: Any, protocol: Any = None, **options: Any) -> bytes:
        file = io.BytesIO()
        dump(obj, file, protocol, **options)
        return file.getvalue()

    def read(file: Any, **options: Any) -> Any:
        return Unpickler(file, **options).load()

    def loads(data: Any, /, **options: Any) -> Any:
        return read(io.BytesIO(data), **options)

    names = {"Pickler": Pickler, "Unpickler": Unpickler, "dump": dump, "dumps": dumps, "load": read, "loads": loads}
    return Namespace(pickle, names)


def _other_run(setting: Setting | None) -> Exception:
    what = "a value of another run is unpickled; accepted: one that the same run has pickled"
    return RefusedError(what) if setting is None else setting.fault(RefusedError, what)
