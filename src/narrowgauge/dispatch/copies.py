"""Private copies: the kernel's code executed anew, with stand-ins for NumPy and its kin under every spelling.

Nothing in the user's modules or in sys.modules changes, so there is nothing to restore: an alias, a star import, an
import inside a function, a default argument or a table of functions all meet the stand-ins, because they are made
while the copy is executed. The listed modules are copied along, one set of copies for each setting.
"""

from __future__ import annotations

import builtins
import math
from collections import Counter
from collections.abc import Callable
from types import CodeType, FunctionType, ModuleType
from typing import Any

import numpy as np

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.dispatch.array import Array, wrap
from narrowgauge.dispatch.feed import Feed
from narrowgauge.dispatch.foreign import exchanged
from narrowgauge.dispatch.functions import call_function
from narrowgauge.dispatch.handed import GENERATORS, HandedOver
from narrowgauge.dispatch.importing import Copies
from narrowgauge.dispatch.modules import STOOD_IN, Sources
from narrowgauge.dispatch.randoms import adopted
from narrowgauge.dispatch.setting import Observer, Setting
from narrowgauge.dispatch.standin import refusing_generator
from narrowgauge.dispatch.ufuncs import call_ufunc
from narrowgauge.dispatch.variates import plain_variates
from narrowgauge.errors import KernelError

__all__ = ["Maker", "PrivateCopy", "copy_function", "copy_module", "new_setting"]

Maker = Callable[[Arithmetic, Observer | None, Feed | None], Setting]


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


def new_setting(
    arithmetic: Arithmetic,
    observer: Observer | None = None,
    draws: Feed | None = None,
    kind: Callable[..., Setting] = Setting,
    *,
    casts: bool = False,
) -> Setting:
    """Return a setting for one run, with no user file in it yet; `draws` is what its numpy.random draws from.

    `kind` makes it, `casts` says whether casts are ignored and counted.
    """
    made = kind(arithmetic, files=set(), wrap=wrap, ufunc=call_ufunc, function=call_function, observer=observer)
    made.casts = Counter() if casts else None
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

    What it reaches of its own module, and whatever a run could fill or count, is copied along (`handed.py`);
    modules, functions, classes and objects of listed modules are exchanged for those of `copies`. A function at the
    top level of a listed module is the one of its copy.
    Raises KernelError for what is not a plain Python function, and for what it reaches and cannot be copied.
    """
    if not isinstance(function, FunctionType):
        raise KernelError(f"{function!r} is not a Python function; accepted: a function defined with def")
    copies = copies or Copies(setting, Sources())
    found = copies.counterpart(function)
    if isinstance(found, FunctionType):
        return found
    copies.handed = str(function.__globals__.get("__name__"))
    handed = HandedOver(function.__globals__, setting, copies, lambda value: _standin_of(value, copies, setting))
    made: Callable[..., Any] = handed.function(function)
    return made


def _standin_of(value: Any, copies: Copies, setting: Setting | None) -> Any:
    """Return the stand-in of a module, of one of its functions or of a generator, or the value itself."""
    if value is type:
        return copies.builtins({}).get("type", type)
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
    if isinstance(value, GENERATORS):
        return refusing_generator(type(value).__name__, setting)
    name = getattr(value, "__name__", None)
    if not isinstance(name, str) or isinstance(value, (type, np.ufunc)):
        return exchanged(value, setting)
    owner = getattr(value, "__self__", None)
    if isinstance(owner, GENERATORS):
        return refusing_generator(f"{type(owner).__name__}.{name}", setting)
    for home in (np, np.random, math, builtins):
        if getattr(home, name, None) is value:
            return getattr(copies.stand_in(home.__name__), name)
    return exchanged(value, setting)
