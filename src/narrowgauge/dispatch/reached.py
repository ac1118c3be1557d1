"""What an object of a foreign module leads to: found by what Python's collector of garbage sees of it."""

from __future__ import annotations

import gc
import sys
from collections.abc import Callable, Iterator
from types import CellType, CodeType, FrameType, FunctionType, ModuleType
from typing import Any

import numpy as np

__all__ = ["holds", "is_named", "reached"]

_ENDS = (bytes, CodeType, complex, float, FrameType, int, ModuleType, str, type(None))


def reached(root: Any, is_met: Callable[[Any], bool], is_shared: Callable[[Any], bool]) -> Iterator[tuple[Any, bool]]:
    """Yield each value below a foreign one that `is_met`, or is a function that holds one, or `is_shared` (with True).

    Nothing below these is looked at, nor a class, nor what a foreign function names in its module.
    """
    seen, left = {id(root): root}, [root]
    while left:
        for value in _below(left.pop()):
            if id(value) in seen or isinstance(value, _ENDS):
                continue
            seen[id(value)] = value
            if is_met(value) or (isinstance(value, FunctionType) and holds(value, is_met)):
                yield value, False
            elif isinstance(value, (FunctionType, type)):
                continue
            elif is_shared(value):
                yield value, True
            else:
                left.append(value)


def holds(root: FunctionType, is_met: Callable[[Any], bool]) -> bool:
    """Whether anything below a foreign function, or below a further one that it holds, `is_met`."""
    seen, left = {id(root): root}, [root]
    while left:
        for value in _below(left.pop()):
            if id(value) in seen or isinstance(value, _ENDS):
                continue
            if is_met(value):
                return True
            seen[id(value)] = value
            if not isinstance(value, type):
                left.append(value)
    return False


def is_named(value: Any) -> bool:
    """Whether an object is one that the module of its class holds by a name, such as a sentinel."""
    home = sys.modules.get(str(type(value).__module__))
    return home is not None and any(item is value for item in list(vars(home).values()))


def _below(value: Any) -> list[Any]:
    if isinstance(value, FunctionType):
        parts = [value.__defaults__, value.__kwdefaults__, value.__dict__]
        return [*(value.__closure__ or ()), *parts]
    if isinstance(value, np.ndarray):
        return list(value.flat) if value.dtype.hasobject else []
    if isinstance(value, CellType):
        try:
            return [value.cell_contents]
        except ValueError:  # not assigned yet
            return []
    return gc.get_referents(value)
