"""Stand-ins for scipy.stats and scipy.special: on the state they compute in float64 and are rounded once.

Elementwise functions of scipy.special are `rounded`, everything else is `whole`. Numbers that meet the state are
rounded as constants first, integers stay. Plain arguments go to the real functions; `rvs` draws from the tape of the
run, and is refused where the kernel has none.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from types import BuiltinFunctionType, FunctionType, ModuleType
from typing import Any

import numpy as np

from narrowgauge.dispatch import mathematics
from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.namespaces import Exchanging, scipy_parts
from narrowgauge.dispatch.scalar import State
from narrowgauge.dispatch.setting import Route, Setting, Wrapped, holds
from narrowgauge.dispatch.standin import refusing_generator, refusing_namespace
from narrowgauge.dispatch.variates import drawing, is_distribution
from narrowgauge.errors import RefusedError

__all__ = ["exchanged", "scipy_namespace"]

_MODULES = ("scipy.special", "scipy.stats")


def scipy_namespace(setting: Setting, imported: Callable[[str], ModuleType]) -> ModuleType:
    """Return a stand-in for `scipy` with stand-ins for its `special` and `stats`, made when they are asked for.

    `imported` imports a module for real.
    """

    def special() -> ModuleType:
        return Exchanging(imported("scipy.special"), lambda name, value: _special(name, value, setting))

    def stats() -> ModuleType:
        return Exchanging(imported("scipy.stats"), lambda name, value: _stats(f"scipy.stats.{name}", value, setting))

    return scipy_parts(imported, {"special": special, "stats": stats})


def exchanged(value: Any, setting: Setting) -> Any:
    """Return the stand-in for a function or distribution of SciPy or of Python's statistics, or the value itself."""
    for module in _MODULES:
        name = getattr(value, "__name__", None) or getattr(value, "name", None)
        plain = sys.modules.get(module)
        if isinstance(name, str) and plain is not None and getattr(plain, name, None) is value:
            return (
                _special(name, value, setting) if module == _MODULES[0] else _stats(f"{module}.{name}", value, setting)
            )
    if type(value).__module__.startswith("scipy.stats.") and is_distribution(value):
        return _Distribution(value, "scipy.stats distribution", setting)
    return mathematics.exchanged(value, setting)


def _special(name: str, value: Any, setting: Setting) -> Any:
    name = f"scipy.special.{name}"
    if isinstance(value, np.ufunc):
        return _function(value, name, setting, "rounded")
    is_function = isinstance(value, (FunctionType, BuiltinFunctionType))
    return _function(value, name, setting, "whole") if is_function else value


def _stats(name: str, value: Any, setting: Setting) -> Any:
    if isinstance(value, ModuleType):
        if value.__name__ == "scipy.stats.qmc":
            return refusing_namespace(value.__name__, setting)
        return Exchanging(value, lambda inner, found: _stats(f"{name}.{inner}", found, setting))
    if isinstance(value, FunctionType):
        return _function(value, name, setting, "whole")
    if is_distribution(value):
        return _Distribution(value, name, setting)
    return value


class _Distribution:
    """A distribution, frozen or not, whose methods take the state.

    `of_state` says that it was frozen with parameters of the state: whatever it computes is rounded.
    """

    def __init__(self, plain: Any, name: str, setting: Setting, of_state: bool = False) -> None:
        self._plain, self._name, self._setting, self._of_state = plain, name, setting, of_state

    @property  # type: ignore[misc]  # isinstance() must decide as it does in plain code
    def __class__(self) -> Any:
        return type(self._plain)

    def __call__(self, *arguments: Any, **keywords: Any) -> Any:
        of_state = holds([*arguments, keywords], State)
        if of_state:
            arguments, keywords = _wide(arguments, self._setting), _wide(keywords, self._setting)
        return _Distribution(self._plain(*arguments, **keywords), self._name, self._setting, of_state)

    def __getattr__(self, name: str) -> Any:
        if name == "rvs":
            if self._setting.draws is None:
                return refusing_generator(f"{self._name}.rvs", self._setting)
            return self._rvs
        found = getattr(self._plain, name)
        if not callable(found) or name.startswith("__"):
            return found
        return _function(found, f"{self._name}.{name}", self._setting, "whole", always=self._of_state)

    def _rvs(self, *arguments: Any, random_state: Any = None, **keywords: Any) -> Any:
        """Draw from the tape; parameters are as the format has them, and scaling and shifting are rounded."""
        setting, name = self._setting, f"{self._name}.rvs"
        if self._of_state or holds([*arguments, keywords], State):
            setting.draws.remark(f"a parameter of {name} depends on the state: it enters by its value")
        draw = drawing(self._plain.rvs, setting.draws)
        result = draw(*_wide(arguments, setting), random_state=random_state, **_wide(keywords, setting))
        if not isinstance(result, Wrapped) and _kind(result) not in "biu":
            what = f"{name} gave plain numbers, which do not come from the audit's own streams"
            raise setting.fault(RefusedError, f"{what}; accepted: the generator's methods")
        return setting.wrap(result) if not isinstance(result, Wrapped) else result


def _function(
    plain: Callable[..., Any], name: str, setting: Setting, route: Route, *, always: bool = False
) -> Callable[..., Any]:
    """Return a stand-in for one function; it rounds where an argument is of the state, or `always`."""

    def function(*arguments: Any, **keywords: Any) -> Any:
        if not always and not holds([*arguments, keywords], Wrapped):
            return plain(*arguments, **keywords)
        out = keywords.pop("out", None)
        if keywords.keys() & {"where", "casting", "dtype", "subok", "signature"} and isinstance(plain, np.ufunc):
            raise setting.fault(RefusedError, f"{name} on the state takes no keyword but out")
        wide = _wide(arguments, setting)
        result = _narrow(plain(*wide, **_wide(keywords, setting)), name, setting)
        setting.note(name, route, wide, _carriers(result))
        return result if out is None else _into(out, result, name, setting)

    function.__name__ = function.__qualname__ = name.rpartition(".")[2]
    function.__doc__ = plain.__doc__
    return function


def _wide(value: Any, setting: Setting) -> Any:
    """Return a value for float64 code: the state and constants as the format has them, integers as they are."""
    if isinstance(value, (list, tuple)):
        items = [_wide(item, setting) for item in value]
        return items if isinstance(value, list) else tuple(items)
    if isinstance(value, dict):
        return {name: _wide(item, setting) for name, item in value.items()}
    if isinstance(value, Wrapped):
        carrier = setting.admit(value)
        return carrier if _kind(carrier) in "biu" or isinstance(carrier, float) else np.asarray(carrier, np.float64)[()]
    if isinstance(value, (float, np.floating)) or (isinstance(value, np.ndarray) and value.dtype.kind == "f"):
        carrier = setting.admit(value)
        return carrier if isinstance(carrier, float) else np.asarray(carrier, np.float64)[()]
    return value


def _narrow(result: Any, name: str, setting: Setting) -> Any:
    """Return what float64 code gave, rounded once and wrapped; a tuple part by part."""
    if type(result) is tuple or hasattr(result, "_make"):  # SciPy also has tuples that hold more than their parts
        parts = [_narrow(part, name, setting) for part in result]
        return result._make(parts) if hasattr(result, "_make") else tuple(parts)
    if result is None or isinstance(result, (bool, int, str)):
        return result
    kind = _kind(result) if isinstance(result, (float, np.ndarray, np.generic)) else "O"
    if kind in "biu":
        return setting.wrap(result)
    if kind != "f":
        raise setting.fault(RefusedError, f"{name} of the state gives a {type(result).__name__} that cannot be rounded")
    if setting.arithmetic.format.name == "float64":
        return setting.wrap(result)
    carrier = setting.arithmetic.cast(np.asarray(result))
    return setting.wrap(np.asarray(carrier) if isinstance(result, np.ndarray) else carrier[()])


def _into(out: Any, result: Any, name: str, setting: Setting) -> Any:
    targets = out if isinstance(out, tuple) else (out,)
    for target, part in zip(targets, result if isinstance(result, tuple) else (result,), strict=True):
        if not isinstance(target, Array):
            raise setting.plain_target(name)
        target[...] = part
    return out


def _kind(value: Any) -> str:
    return np.asarray(value).dtype.kind


def _carriers(result: Any) -> Any:
    if isinstance(result, tuple):
        return tuple(map(_carriers, result))
    return result._carrier if isinstance(result, Wrapped) else result
