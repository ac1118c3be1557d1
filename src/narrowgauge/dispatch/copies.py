"""Private copies: the kernel's code executed anew, with stand-ins for numpy and math under every spelling.

Nothing in the user's modules or in sys.modules changes, so there is nothing to restore: an alias, a star import, an
import inside a function, a default argument or a table of functions all meet the stand-ins, because they are made
while the copy is executed. In this version the kernel's own module is copied; modules beside it are refused.
"""

from __future__ import annotations

import builtins
import importlib
import math
import random
import sys
import sysconfig
from collections.abc import Callable, Mapping
from pathlib import Path
from types import CellType, CodeType, FunctionType, ModuleType
from typing import Any

import numpy as np

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.dispatch.array import Array, wrap
from narrowgauge.dispatch.functions import call_function
from narrowgauge.dispatch.setting import Observer, Setting
from narrowgauge.dispatch.standin import (
    builtins_namespace,
    dataclasses_namespace,
    math_namespace,
    numpy_namespace,
    refusing_generator,
    refusing_namespace,
)
from narrowgauge.dispatch.ufuncs import call_ufunc
from narrowgauge.errors import KernelError, RefusedError

__all__ = ["PrivateCopy", "copy_function", "copy_module", "new_setting"]

_RANDOM_MODULES = ("random", "secrets")
_INSTALLED = frozenset(sysconfig.get_paths().values())
_GENERATORS = (np.random.Generator, np.random.RandomState, np.random.BitGenerator, random.Random)


class PrivateCopy:
    """A function of a private copy with the setting that its operations go through; None for plain NumPy."""

    __slots__ = ("function", "setting")

    def __init__(self, function: Callable[..., Any], setting: Setting | None) -> None:
        self.function = function
        self.setting = setting

    def own(self, draws: np.ndarray[Any, Any]) -> Any:
        """Return draws, already rounded carriers, as the kernel's first argument; not copied."""
        return draws if self.setting is None else Array(draws, self.setting)


def new_setting(arithmetic: Arithmetic, observer: Observer | None = None) -> Setting:
    """Return a setting for one run, with no user file in it yet."""
    return Setting(arithmetic, files=set(), wrap=wrap, ufunc=call_ufunc, function=call_function, observer=observer)


def copy_module(code: CodeType, name: str, setting: Setting | None) -> ModuleType:
    """Execute a compiled module anew in a namespace of its own; under stand-ins unless `setting` is None.

    Raises whatever the module raises.
    """
    file = code.co_filename
    module = ModuleType(name)
    module.__file__ = file
    standins = {} if setting is None else _standins(setting)
    standins["dataclasses"] = dataclasses_namespace(module.__dict__)
    package = name.partition(".")[0] if "." in name else None
    importer = _importer(setting, standins, Path(file).parent, package)
    module.__dict__["__builtins__"] = _builtins(setting, standins, importer)
    if setting is not None:
        setting.files.add(file)
    exec(code, module.__dict__)
    return module


def copy_function(function: Callable[..., Any], setting: Setting) -> Callable[..., Any]:
    """Return a copy of a Python function with new globals, defaults and closure cells under stand-ins.

    Functions of the same module that it reaches are copied along, and so are the lists, dictionaries, sets and arrays
    of numbers that it reaches; other values are shared. Raises KernelError for what is not a plain Python function.
    """
    if not isinstance(function, FunctionType):
        raise KernelError(f"{function!r} is not a Python function; accepted: a function defined with def")
    return _FunctionCopies(function.__globals__, setting).copied(function)


class _FunctionCopies:
    """Copies of the functions of one module that share one new namespace, as the originals share theirs.

    `_known` holds what was exchanged by identity, each with the original, which must live as long as its id is used.
    """

    def __init__(self, home: dict[str, Any], setting: Setting) -> None:
        self._home = home
        self._setting = setting
        self._standins = _standins(setting)
        self._known: dict[int, tuple[Any, Any]] = {}
        importer = _importer(setting, self._standins, None, None)
        self._names = {**home, "__builtins__": _builtins(setting, self._standins, importer)}
        self._reached = {"__builtins__"}

    def copied(self, source: FunctionType) -> FunctionType:
        if id(source) in self._known:
            return self._known[id(source)][1]  # type: ignore[no-any-return]  # a function's copy is a function
        closure = source.__closure__
        cells = None if closure is None else tuple(self._cell(cell) for cell in closure)
        made = FunctionType(source.__code__, self._names, source.__name__, None, cells)
        self._known[id(source)] = source, made
        self._setting.files.add(source.__code__.co_filename)
        for name in _names(source.__code__) & (self._home.keys() - self._reached):
            self._reached.add(name)
            self._names[name] = self._exchanged(self._home[name])
        for cell in closure or ():
            self._fill(cell)
        made.__defaults__ = source.__defaults__ and tuple(map(self._exchanged, source.__defaults__))
        made.__kwdefaults__ = source.__kwdefaults__ and self._exchanged(source.__kwdefaults__)
        made.__dict__.update(self._exchanged(source.__dict__))
        made.__qualname__ = source.__qualname__
        return made

    def _cell(self, cell: CellType) -> CellType:
        """Return the new cell, still empty, that all copies share where the originals shared `cell`."""
        return self._known.setdefault(id(cell), (cell, CellType()))[1]  # type: ignore[no-any-return]

    def _fill(self, cell: CellType) -> None:
        new = self._cell(cell)
        try:
            content = cell.cell_contents
        except ValueError:  # not assigned yet
            return
        new.cell_contents = self._exchanged(content)

    def _exchanged(self, value: Any) -> Any:
        """Return what stands for a value in the copy: a stand-in, a copy, or the value itself."""
        if isinstance(value, FunctionType) and value.__globals__ is self._home:
            return self.copied(value)
        if id(value) in self._known:
            return self._known[id(value)][1]
        made = _container(value)
        if made is not None:
            self._known[id(value)] = value, made  # before its contents, which may hold it
            if isinstance(made, list):
                made.extend(map(self._exchanged, value))
            elif isinstance(made, dict):
                made.update((key, self._exchanged(item)) for key, item in value.items())
            return made
        if type(value) is tuple:
            return tuple(map(self._exchanged, value))
        return _standin_of(value, self._standins, self._setting)


def _container(value: Any) -> Any:
    """Return a new empty list or dictionary, or a copy of a set or array; None for what is shared."""
    if type(value) in (list, dict):
        return type(value)()
    if type(value) in (set, np.ndarray):
        return value.copy()
    return None


def _names(code: CodeType) -> set[str]:
    """Return the global names that a code object and the code inside it mention."""
    found = set(code.co_names)
    for constant in code.co_consts:
        if isinstance(constant, CodeType):
            found |= _names(constant)
    return found


def _standin_of(value: Any, standins: Mapping[str, ModuleType], setting: Setting) -> Any:
    """Return the stand-in of a module, of one of its functions or of a generator, or the value itself."""
    if isinstance(value, ModuleType):
        if value.__name__ in _RANDOM_MODULES:
            return refusing_namespace(value.__name__, setting)
        return standins.get(value.__name__, value)
    if isinstance(value, _GENERATORS):
        return refusing_generator(type(value).__name__, setting)
    name = getattr(value, "__name__", None)
    if not isinstance(name, str) or isinstance(value, (type, np.ufunc)):
        return value
    owner = getattr(value, "__self__", None)
    if isinstance(owner, _GENERATORS):
        return refusing_generator(f"{type(owner).__name__}.{name}", setting)
    for module in (np, np.random, math, builtins):
        if getattr(module, name, None) is value:
            return getattr(standins[module.__name__], name)
    return value


def _standins(setting: Setting) -> dict[str, ModuleType]:
    numpy = numpy_namespace(setting)
    return {
        "numpy": numpy,
        "numpy.random": numpy.random,
        "math": math_namespace(setting),
        "builtins": builtins_namespace(setting),
    }


def _builtins(
    setting: Setting | None, standins: Mapping[str, ModuleType], importer: Callable[..., Any]
) -> dict[str, Any]:
    """Return the `__builtins__` of a private copy."""
    changed = {} if setting is None else {name: getattr(standins["builtins"], name) for name in ("max", "min")}
    return {**vars(builtins), **changed, "__import__": importer}


def _importer(
    setting: Setting | None, standins: Mapping[str, ModuleType], folder: Path | None, package: str | None
) -> Callable[..., Any]:
    """Return the `__import__` of a private copy that lies in `folder` and belongs to `package`, if any."""

    def hand_out(
        name: str,
        globals: Mapping[str, Any] | None = None,
        locals: Mapping[str, Any] | None = None,
        fromlist: tuple[str, ...] | None = (),
        level: int = 0,
    ) -> Any:
        top = name.partition(".")[0]
        if level == 0 and top in standins:
            importlib.import_module(name)  # its own error where there is no such module
            if not fromlist:
                return standins[top]
            return standins.get(name) or _inside(standins[top], name)
        if level or top == package or (folder is not None and _beside(folder, top)):
            raise _refused_module("." * level + name, setting)
        if setting is not None and name in _RANDOM_MODULES:
            return refusing_namespace(name, setting)
        return builtins.__import__(name, globals, locals, fromlist or (), level)

    return hand_out


def _inside(module: Any, name: str) -> Any:
    for part in name.split(".")[1:]:
        module = getattr(module, part)
    return module


def _beside(folder: Path, name: str) -> bool:
    """Whether a module of that name lies in the kernel's folder; what is installed there is not the user's."""
    if name == "numpy" or name in sys.stdlib_module_names or str(folder) in _INSTALLED:
        return False
    return (folder / f"{name}.py").is_file() or (folder / name / "__init__.py").is_file()


def _refused_module(name: str, setting: Setting | None) -> Exception:
    message = (
        f"the kernel's module imports {name}, which lies beside it; in this version the kernel is one module: "
        "its NumPy would not be rounded. Accepted: put what the kernel needs into its own file"
    )
    return KernelError(message) if setting is None else setting.fault(RefusedError, message)
