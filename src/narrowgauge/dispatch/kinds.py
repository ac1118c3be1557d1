"""What `type` is in a private copy: of a value that stands in for another one it gives the class that is stood in for.

`type(x) is np.ndarray` and `type(s) in (float, np.float64)` then decide as they do in plain code. In everything else it
is Python's own `type`: a base of metaclasses, the answer of `type(SomeClass)`, the maker of classes, `type[...]`.
"""

from __future__ import annotations

import sys
from typing import Any

__all__ = ["TYPE"]

_OURS = __name__.partition(".")[0] + "."


class _Kind(type):
    """The type of the stand-in, and of the kernel's own metaclasses, which derive from it."""

    def __call__(cls, *arguments: Any, **keywords: Any) -> Any:
        if cls is not TYPE:  # a metaclass of the kernel's
            return super().__call__(*arguments, **keywords)
        if len(arguments) == 1 and not keywords:
            return _answer(arguments[0])
        if len(arguments) == 3 and isinstance(arguments[2], dict):  # Python reads the module from the calling frame
            name, bases, names = arguments
            arguments = name, bases, {"__module__": sys._getframe(1).f_globals.get("__name__"), **names}
        return type(*arguments, **keywords)

    def __instancecheck__(cls, value: Any) -> bool:
        return isinstance(value, type) if cls is TYPE else super().__instancecheck__(value)

    def __subclasscheck__(cls, kind: type) -> bool:
        return issubclass(kind, type) if cls is TYPE else super().__subclasscheck__(kind)

    def __getitem__(cls, item: Any) -> Any:
        return type[item]

    def __eq__(cls, other: object) -> bool:
        return other is cls or (cls is TYPE and other is type)

    def __hash__(cls) -> int:
        return hash(type) if cls is TYPE else super().__hash__()


def _answer(value: Any) -> Any:
    """Return the class that plain code sees in the place of a value's own."""
    kind: Any = type(value)
    if _is_ours(kind):
        kind = value.__class__  # a text of the state, which has no other class to show, is a str
        kind = next(base for base in kind.__mro__ if not _is_ours(base))
    return TYPE if kind is type else kind


def _is_ours(kind: type) -> bool:
    return str(kind.__module__).startswith(_OURS)


TYPE: Any = _Kind("type", (type,), {"__module__": "builtins", "__qualname__": "type", "__doc__": type.__doc__})
