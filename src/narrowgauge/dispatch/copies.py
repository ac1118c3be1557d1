"""Private copies: the kernel's code executed anew, with stand-ins for NumPy and its kin under every spelling.

Nothing in the user's modules or in sys.modules changes, so there is nothing to restore: an alias, a star import, an
import inside a function, a default argument or a table of functions all meet the stand-ins, because they are made
while the copy is executed. The listed modules are copied along, one set of copies for each setting.
"""

from __future__ import annotations

import builtins
import copy
import enum
import math
import random
from collections.abc import Callable
from types import CellType, CodeType, FunctionType, MethodType, ModuleType
from typing import Any

import numpy as np

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.dispatch.array import Array, as_state, wrap
from narrowgauge.dispatch.compiled import exchanged_compiled, is_compiled
from narrowgauge.dispatch.feed import Feed
from narrowgauge.dispatch.foreign import exchanged
from narrowgauge.dispatch.functions import call_function
from narrowgauge.dispatch.importing import Copies
from narrowgauge.dispatch.modules import STOOD_IN, Sources
from narrowgauge.dispatch.randoms import adopted
from narrowgauge.dispatch.setting import Observer, Setting
from narrowgauge.dispatch.standin import refusing_generator
from narrowgauge.dispatch.ufuncs import call_ufunc
from narrowgauge.dispatch.variates import plain_variates
from narrowgauge.errors import KernelError

__all__ = ["PrivateCopy", "copy_function", "copy_module", "new_setting"]

_GENERATORS = (np.random.Generator, np.random.RandomState, np.random.BitGenerator, random.Random)


class PrivateCopy:
    """A function of a private copy with the setting that its operations go through; None for plain NumPy.

    `copies` is the set of copies that it belongs to, if any.
    """

    __slots__ = ("copies", "function", "setting")

    def __init__(self, function: Callable[..., Any], setting: Setting | None, copies: Copies | None = None) -> None:
        self.function = function
        self.setting = setting
        self.copies = copies

    @property
    def shared(self) -> tuple[str, ...]:
        """The modules that were imported for real up to now because they are listed as shared."""
        return () if self.copies is None else tuple(sorted(self.copies.shared))

    @property
    def compiled(self) -> tuple[str, ...]:
        """The functions whose Python original has stood in up to now for what numba makes of it."""
        return () if self.copies is None else tuple(sorted(self.copies.compiled))

    def own(self, draws: np.ndarray[Any, Any]) -> Any:
        """Return draws, already rounded carriers, as the kernel's first argument; not copied."""
        return draws if self.setting is None else Array(draws, self.setting)


def new_setting(arithmetic: Arithmetic, observer: Observer | None = None, draws: Feed | None = None) -> Setting:
    """Return a setting for one run, with no user file in it yet; `draws` is what its numpy.random draws from."""
    made = Setting(arithmetic, files=set(), wrap=wrap, ufunc=call_ufunc, function=call_function, observer=observer)
    if draws is not None:
        made.draws, draws.setting = draws, made
    return made


def copy_module(code: CodeType, name: str, setting: Setting | None) -> ModuleType:
    """Execute a compiled module that lists no other one; under stand-ins unless `setting` is None.

    Raises whatever the module raises.
    """
    module: ModuleType = Copies(setting, Sources.alone(code, name)).load(name)
    return module


def copy_function(
    function: Callable[..., Any], setting: Setting | None, copies: Copies | None = None
) -> Callable[..., Any]:
    """Return a copy of a Python function with new globals, defaults and closure cells under stand-ins.

    Functions of the same module that it reaches are copied along, and so are the lists, dictionaries, sets and arrays
    that it reaches, those of float64 as constants of the state; modules, functions, classes and objects of listed
    modules are exchanged for those of `copies`; other values are shared. A function at the top level of a listed module
    is the one of its copy.
    Raises KernelError for what is not a plain Python function.
    """
    if not isinstance(function, FunctionType):
        raise KernelError(f"{function!r} is not a Python function; accepted: a function defined with def")
    copies = copies or Copies(setting, Sources())
    found = copies.counterpart(function)
    if isinstance(found, FunctionType):
        return found
    return _FunctionCopies(function.__globals__, setting, copies).copied(function)


class _FunctionCopies:
    """Copies of the functions of one module that share one new namespace, as the originals share theirs.

    `_known` holds what was exchanged by identity, each with the original, which must live as long as its id is used.
    """

    def __init__(self, home: dict[str, Any], setting: Setting | None, copies: Copies) -> None:
        self._home = home
        self._setting = setting
        self._copies = copies
        self._known: dict[int, tuple[Any, Any]] = {}
        self._names = dict(home)
        self._names["__builtins__"] = copies.builtins(self._names)
        self._reached = {"__builtins__"}

    def copied(self, source: FunctionType) -> FunctionType:
        if id(source) in self._known:
            return self._known[id(source)][1]  # type: ignore[no-any-return]  # a function's copy is a function
        closure = source.__closure__
        cells = None if closure is None else tuple(self._cell(cell) for cell in closure)
        made = FunctionType(source.__code__, self._names, source.__name__, None, cells)
        self._known[id(source)] = source, made
        if self._setting is not None:
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
        made = self._container(value)
        if made is not None:
            self._known[id(value)] = value, made  # before its contents, which may hold it
            if isinstance(made, list):
                made.extend(map(self._exchanged, value))
            elif isinstance(made, dict):
                made.update((key, self._exchanged(item)) for key, item in value.items())
            return made
        if type(value) is tuple:
            return tuple(map(self._exchanged, value))
        if is_compiled(value):
            original = value.py_func
            if original.__globals__ is self._home:
                self._copies.compiled.add(f"{original.__module__}.{original.__qualname__}")
                return self.copied(original)
            return exchanged_compiled(value, self._setting, self._copies.counterpart)
        if isinstance(value, MethodType):
            owner = self._exchanged(value.__self__)
            return value if owner is value.__self__ else getattr(owner, value.__name__)
        if isinstance(value, _GENERATORS) and self._setting is None and self._copies.draws is None:
            self._known[id(value)] = value, copy.deepcopy(value)  # so that plain NumPy's run leaves the user's alone
            return self._known[id(value)][1]
        made = self._object(value)
        return _standin_of(value, self._copies, self._setting) if made is None else made

    def _container(self, value: Any) -> Any:
        """Return a new empty list or dictionary, or a copy of a set or array; None for what is shared.

        Floats are constants of the state, as what np.array makes of them in a module that is executed anew.
        """
        if type(value) in (list, dict):
            return type(value)()
        if type(value) is set:
            return value.copy()
        if type(value) is not np.ndarray:
            return None
        return as_state(value, self._setting) if value.dtype == np.float64 and self._setting else value.copy("K")

    def _object(self, value: Any) -> Any:
        """Return what stands in the copies for a function, class or object of a listed module; None for others."""
        if isinstance(value, (type, FunctionType)):
            return self._copies.counterpart(value)
        kind = self._copies.counterpart(type(value))
        if kind is None:
            return None
        if isinstance(value, enum.Enum):
            return kind[value.name]
        base: Any = next((base for base in (tuple, list, dict) if isinstance(value, base)), object)
        try:
            made = base.__new__(kind, map(self._exchanged, value)) if base is tuple else base.__new__(kind)
        except TypeError:  # an object that only its own type can make
            return None
        self._known[id(value)] = value, made  # before its attributes, which may lead back to it
        if base is list:
            list.extend(made, map(self._exchanged, value))
        elif base is dict:
            dict.update(made, {key: self._exchanged(item) for key, item in value.items()})
        for name, item in _attributes(value).items():
            object.__setattr__(made, name, self._exchanged(item))
        return made


def _names(code: CodeType) -> set[str]:
    """Return the global names that a code object and the code inside it mention."""
    found = set(code.co_names)
    for constant in code.co_consts:
        if isinstance(constant, CodeType):
            found |= _names(constant)
    return found


def _attributes(value: Any) -> dict[str, Any]:
    """Return the attributes of an object by name, those in slots included."""
    slots = [name for base in type(value).__mro__ for name in _slots(base) if hasattr(value, name)]
    return {name: getattr(value, name) for name in slots} | getattr(value, "__dict__", {})


def _slots(base: type) -> tuple[str, ...]:
    named = vars(base).get("__slots__", ())
    names = (named,) if isinstance(named, str) else tuple(named)
    return tuple(name for name in names if not name.startswith("__"))


def _standin_of(value: Any, copies: Copies, setting: Setting | None) -> Any:
    """Return the stand-in of a module, of one of its functions or of a generator, or the value itself."""
    drawn = None if copies.draws is None else adopted(value, copies.draws)
    if drawn is not None:
        return drawn
    if isinstance(value, ModuleType):
        module = value.__name__
        if copies.sources.copies(module):
            return copies.load(module)
        known = copies.stand_in(module) if module.partition(".")[0] in STOOD_IN - {"sys"} else None
        return value if known is None else known
    if setting is None:
        return value if copies.draws is None else plain_variates(value, copies.draws)
    if isinstance(value, _GENERATORS):
        return refusing_generator(type(value).__name__, setting)
    name = getattr(value, "__name__", None)
    if not isinstance(name, str) or isinstance(value, (type, np.ufunc)):
        return exchanged(value, setting)
    owner = getattr(value, "__self__", None)
    if isinstance(owner, _GENERATORS):
        return refusing_generator(f"{type(owner).__name__}.{name}", setting)
    for home in (np, np.random, math, builtins):
        if getattr(home, name, None) is value:
            return getattr(copies.stand_in(home.__name__), name)
    return exchanged(value, setting)
