"""Stand-ins for modules of the standard library that would look private copies up in sys.modules, or change it."""

from __future__ import annotations

import functools
import importlib
import importlib.resources
import importlib.util
import pkgutil
import sys
import typing
from collections.abc import Callable, Iterator, Mapping, MutableMapping
from types import ModuleType
from typing import Any

__all__ = ["Exchanging", "Namespace", "importlib_namespace", "scipy_parts", "sys_namespace", "typing_namespace"]


class Namespace(ModuleType):
    """A module whose missing names are those of the module that it stands for; `late` names are made when asked for."""

    def __init__(
        self, plain: ModuleType, names: Mapping[str, Any], late: Mapping[str, Callable[[], Any]] | None = None
    ) -> None:
        super().__init__(plain.__name__, plain.__doc__)
        public = [name for name in vars(plain) if not name.startswith("_")]
        self.__dict__.update({"_plain": plain, "_late": late or {}, "__all__": getattr(plain, "__all__", public)})
        self.__dict__.update(names)

    def __getattr__(self, name: str) -> Any:
        make = self.__dict__["_late"].get(name)
        if make is None:
            return getattr(self.__dict__["_plain"], name)
        return self.__dict__.setdefault(name, make())

    def __dir__(self) -> list[str]:
        return dir(self.__dict__["_plain"])


class Exchanging(Namespace):
    """A namespace that hands out each of its names through `exchange`(name, value), and keeps what came of it."""

    def __init__(self, plain: ModuleType, exchange: Callable[[str, Any], Any]) -> None:
        super().__init__(plain, {"_exchange": exchange})

    def __getattr__(self, name: str) -> Any:
        value = getattr(self.__dict__["_plain"], name)
        return value if name.startswith("__") else self.__dict__.setdefault(name, self._exchange(name, value))


def scipy_parts(imported: Callable[[str], ModuleType], own: Mapping[str, Callable[[], ModuleType]]) -> ModuleType:
    """Return a stand-in for `scipy` whose packages are imported by `imported` when asked for; `own` are other ones.

    SciPy itself imports them when they are first looked up, which the copies would take for a change of their own.
    """
    plain = imported("scipy")
    inside = [found.name for found in pkgutil.iter_modules(plain.__path__) if found.ispkg and found.name[0] != "_"]
    real = {name: functools.partial(imported, f"scipy.{name}") for name in inside}
    return Namespace(plain, {}, {**real, **own})


class _System(Namespace):
    """Python's `sys` with a search path and a table of modules of its own; all else is set on `sys` itself."""

    def __setattr__(self, name: str, value: Any) -> None:
        if name in self.__dict__:
            self.__dict__[name] = value
        else:
            setattr(sys, name, value)


class _ModuleTable(MutableMapping[str, Any]):
    """Python's table of modules, to be read only, without an answer for a module that is copied."""

    def __init__(self, lookup: Callable[[str], Any], change: Callable[[str], Exception]) -> None:
        self._lookup, self._change = lookup, change

    def __getitem__(self, name: str) -> Any:
        return self._lookup(name)

    def __contains__(self, name: object) -> bool:
        return name in sys.modules

    def __setitem__(self, name: str, module: Any) -> None:
        raise self._change(name)

    def __delitem__(self, name: str) -> None:
        raise self._change(name)

    def __iter__(self) -> Iterator[str]:
        return iter(list(sys.modules))

    def __len__(self) -> int:
        return len(sys.modules)


def sys_namespace(path: list[str], lookup: Callable[[str], Any], change: Callable[[str], Exception]) -> ModuleType:
    """Return a stand-in for `sys` with `path` as its search path.

    `lookup` answers for a name in sys.modules, `change` gives the error for an entry that is set or deleted.
    """
    return _System(sys, {"path": path, "modules": _ModuleTable(lookup, change)})


def importlib_namespace(load: Callable[[str], Any], copied: Callable[[str], bool]) -> ModuleType:
    """Return a stand-in for `importlib` whose import_module gives what `load` gives for a full name."""

    def import_module(name: str, package: str | None = None) -> Any:
        return load(importlib.util.resolve_name(name, package))

    def files(anchor: Any = None, **keywords: Any) -> Any:
        if anchor is None:  # the caller's package, which Python reads from the frame
            anchor = sys._getframe(1).f_globals["__package__"]
        known = isinstance(anchor, str) and copied(anchor)
        return importlib.resources.files(load(anchor) if known else anchor, **keywords)

    return Namespace(
        importlib,
        {"import_module": import_module, "resources": Namespace(importlib.resources, {"files": files})},
    )


def typing_namespace(names_of: Callable[[str], Mapping[str, Any] | None]) -> ModuleType:
    """Return a stand-in for `typing` whose get_type_hints looks the words of a copied class up in its own module.

    `names_of` gives the names of a private copy, or None for another module.
    """

    def get_type_hints(value: Any, globalns: Any = None, localns: Any = None, include_extras: bool = False) -> Any:
        if globalns is None and isinstance(value, type):
            known = [names_of(base.__module__) for base in reversed(value.__mro__)]
            globalns = {name: item for names in known if names is not None for name, item in names.items()} or None
        return typing.get_type_hints(value, globalns, localns, include_extras)

    return Namespace(typing, {"get_type_hints": get_type_hints})
