"""Copies of classes and of their objects, for functions that were handed over from Python.

A class is made empty, of the copies of its bases, and then gets the copies of what the original holds, so that what
leads back to it (`super()`, a registry, an object of its own) meets the copy. No hook of the user's runs again.
"""

from __future__ import annotations

import abc
import enum
import typing
from collections.abc import Callable, Iterator
from types import GetSetDescriptorType, MemberDescriptorType
from typing import Any

__all__ = ["ON_HEAP", "CopiedClasses", "instance_of", "rebuilt"]

ON_HEAP = 1 << 9  # the flag of a class that Python code made
_METACLASSES = (type, abc.ABCMeta, enum.EnumMeta, type(typing.Protocol))
_AT_ONCE = ("__module__", "__qualname__", "__doc__", "__orig_bases__", "__slots__", "__annotations__")
_NOT_COPIED = frozenset({*_AT_ONCE, "__dict__", "__weakref__", "_abc_impl"})
_BASES = (tuple, list, dict, set, frozenset)

Keep = Callable[[Any, Any], Any]


class CopiedClasses:
    """The copied classes of one set of copies.

    `exchanged` copies what a class holds, `is_own` tells which classes are copied, `refuse` gives the error for others.
    """

    def __init__(
        self,
        exchanged: Callable[[Any], Any],
        is_own: Callable[[type], bool],
        refuse: Callable[[Any, str], Exception],
    ) -> None:
        self._exchanged = exchanged
        self._is_own = is_own
        self._refuse = refuse
        self._later: list[tuple[type, Any]] = []

    def copied(self, source: type, keep: Keep) -> Any:
        """Return the copy of a class, which `keep` is told before anything in it is copied."""
        meta: Any = type(source)
        known = next(kind for kind in meta.__mro__ if not self._is_own(kind))
        if known not in _METACLASSES:
            raise self._refuse(source, f"its metaclass is {known.__module__}.{known.__qualname__}")
        make = type.__new__ if known in (type, enum.EnumMeta) else known.__new__
        bases = tuple(base if base is type else self._exchanged(base) for base in source.__bases__)
        held = dict(vars(source))
        names = {name: held[name] for name in _AT_ONCE if name in held}
        try:
            made = make(meta if meta is known else self._exchanged(meta), source.__name__, bases, names)
        except TypeError as problem:  # a base that other keywords are given to
            raise self._refuse(source, str(problem)) from None
        found = keep(source, made)
        if found is not made:  # what its bases hold led here
            return found
        for name, item in held.items():
            if name == "__init_subclass__":
                self._later.append((made, self._exchanged(item)))
            elif name not in _NOT_COPIED and not isinstance(item, (GetSetDescriptorType, MemberDescriptorType)):
                type.__setattr__(made, name, self._exchanged(item))
        if isinstance(source, abc.ABCMeta):
            for reference in vars(abc)["_get_dump"](source)[0]:  # what was registered with it
                made.register(self._exchanged(reference()))
        inner: type
        for inner in type.__subclasses__(source):
            if self._is_own(inner):
                self._exchanged(inner)
        return made

    def finish(self) -> None:
        """Give the classes their `__init_subclass__`, which must see none of the copies being made."""
        for made, hook in self._later:
            type.__setattr__(made, "__init_subclass__", hook)
        self._later.clear()


def instance_of(kind: Any, value: Any, exchanged: Callable[[Any], Any], keep: Keep) -> Any:
    """Return an object of a copied class with the copies of a value's attributes and items.

    None for an object that only its own type can make.
    """
    base: Any = next((base for base in _BASES if isinstance(value, base)), object)
    given = [frozenset(map(exchanged, value))] if base is frozenset else []
    if isinstance(value, enum.Enum):
        if "_member_map_" in vars(kind):
            return kind._value2member_map_.get(value.value) or kind(value.value)
        base = vars(type(value))["_member_type_"]
        given = [] if base is object else [value.value]
    if isinstance(value, BaseException):  # by its arguments, without __init__
        base = next(base for base in type(value).__mro__ if not base.__flags__ & ON_HEAP)
        given = [*exchanged(value.args)]
    try:
        made = base.__new__(kind, map(exchanged, value)) if base is tuple else base.__new__(kind, *given)
    except TypeError:
        return None
    found = keep(value, made)  # before its attributes, which may lead back to it
    if found is not made:
        return found
    if base is list:
        list.extend(made, map(exchanged, value))
    elif base is set:
        set.update(made, map(exchanged, value))
    elif base is dict:
        dict.update(made, {exchanged(key): exchanged(item) for key, item in value.items()})
    for name, item in _slots(value):
        object.__setattr__(made, name, exchanged(item))
    if hasattr(value, "__dict__"):
        made.__dict__.update((name, exchanged(item)) for name, item in vars(value).items())
    return made


def rebuilt(value: Any, exchanged: Callable[[Any], Any], keep: Keep) -> Any:
    """Return a copy of an object by the protocol of pickle, of the copies of all that it gives; raises as it raises."""
    kind = type(value)
    had = "__slotnames__" in vars(kind)
    reduced = value.__reduce_ex__(4)
    if not had and "__slotnames__" in vars(kind):  # Python's own note on the class
        type.__delattr__(kind, "__slotnames__")
    if isinstance(reduced, str):  # known by its name
        return value
    function, arguments, state, items, pairs = (*reduced, None, None, None)[:5]
    made = keep(value, exchanged(function)(*exchanged(arguments)))
    if state is not None and hasattr(made, "__setstate__"):
        made.__setstate__(exchanged(state))
    elif state is not None:
        held, slots = state if isinstance(state, tuple) else (state, None)
        if held:
            made.__dict__.update(exchanged(held))
        for name, item in (slots or {}).items():
            object.__setattr__(made, name, exchanged(item))
    for item in items or ():
        made.append(exchanged(item))
    for key, item in pairs or ():
        made[exchanged(key)] = exchanged(item)
    return made


def _slots(value: Any) -> Iterator[tuple[str, Any]]:
    """Yield the names and values of what an object keeps in slots."""
    for base in type(value).__mro__:
        for name, slot in vars(base).items() if "__slots__" in vars(base) else ():
            if isinstance(slot, MemberDescriptorType):
                try:
                    yield name, slot.__get__(value)
                except AttributeError:  # nothing in it
                    continue
