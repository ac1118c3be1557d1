"""Copies of functions that were handed over from Python, with all that they reach of their own module.

Whatever a run could fill, count or keep there is the copy's own: caches, containers, arrays, objects and classes. What
cannot be copied is refused by name, since it would carry values from one run into the next.

| reached                                            | in the copy                                            |
|----------------------------------------------------|--------------------------------------------------------|
| functions, classes, objects of its own module      | copies, with the copy's globals                        |
| those of a listed module                           | those of that module's copy                            |
| lists, dictionaries, arrays, partial objects ...   | copies; arrays of float64 as constants of the state    |
| functions.lru_cache and the like                   | made anew around the copy, empty                       |
| functions of other modules                         | shared; copied where they hold something of the above  |
| objects of other modules                           | deep copies, their arrays plain; what such a module    |
|                                                    | holds by name itself, such as a sentinel, is shared    |
| modules, classes of other modules, locks, files    | stand-ins, or shared                                   |
"""

from __future__ import annotations

import copy
import dis
import functools
import gc
import io
import random
import re
import threading
import weakref
from collections.abc import Callable
from types import (
    BuiltinMethodType,
    CellType,
    CodeType,
    FunctionType,
    GenericAlias,
    MappingProxyType,
    MethodType,
    MethodWrapperType,
    ModuleType,
    UnionType,
)
from typing import Any

import numpy as np

from narrowgauge.dispatch.array import Array, as_state, changing
from narrowgauge.dispatch.classes import ON_HEAP, CopiedClasses, instance_of, rebuilt
from narrowgauge.dispatch.compiled import exchanged_compiled, is_compiled
from narrowgauge.dispatch.importing import Copies
from narrowgauge.dispatch.modules import listed_name
from narrowgauge.dispatch.reached import holds, is_named, reached
from narrowgauge.dispatch.setting import Setting
from narrowgauge.errors import KernelError, said

__all__ = ["GENERATORS", "HandedOver"]

GENERATORS = (np.random.Generator, np.random.RandomState, np.random.BitGenerator, random.Random)
_ATOMS = frozenset({
    bool, bytes, complex, float, int, range, slice, str, type(...), type(None), type(NotImplemented), CodeType,
    re.Pattern,
})  # fmt: skip  # two rows
_SHARED = (
    io.IOBase, np.dtype, np.generic, np.ufunc, type(threading.Lock()), type(threading.RLock()), GenericAlias, UnionType,
)  # fmt: skip  # one row
# Modules of the standard library whose objects hold the kernel's own values: copied through, not as a whole.
_TRANSPARENT = frozenset({"array", "builtins", "collections", "dataclasses", "enum", "functools", "itertools", "types"})
_DISPATCHER = vars(functools)["singledispatch"](len).__code__
_GLOBAL = frozenset({"DELETE_GLOBAL", "LOAD_FROM_DICT_OR_GLOBALS", "LOAD_GLOBAL", "LOAD_NAME", "STORE_GLOBAL"})
_BY_TEXT = frozenset({"eval", "exec", "globals"})  # what these reach, no list of names tells
_WEAK = (weakref.WeakKeyDictionary, weakref.WeakSet, weakref.WeakValueDictionary)


class HandedOver:
    """Copies of what one module's functions reach; they share one new namespace, as the originals share theirs.

    `standin_of` gives the stand-in of a value that no copy is made of, or the value itself.
    """

    def __init__(
        self, home: dict[str, Any], setting: Setting | None, copies: Copies, standin_of: Callable[[Any], Any]
    ) -> None:
        self._home = home
        self._setting = setting
        self._copies = copies
        self._standin_of = standin_of
        self._own = str(home.get("__name__"))
        self._known: dict[int, tuple[Any, Any]] = {}  # by identity, with the original, which must live as long
        self._names = {name: value for name, value in home.items() if name.startswith("__")}
        self._names["__builtins__"] = copies.builtins(self._names)
        self._taken = set(self._names)
        self._trail = [self._own]
        self._classes = CopiedClasses(self.exchanged, self.is_own_class, self.refuse)

    def function(self, source: FunctionType) -> Any:
        """Return the copy of a function that was handed over."""
        self._trail.append(source.__name__)
        made = self.exchanged(source)
        self._classes.finish()
        return made

    def exchanged(self, value: Any) -> Any:
        """Return what stands for a value in the copy: a stand-in, a copy, or the value itself."""
        kind = type(value)
        if kind in _ATOMS:
            return value
        if id(value) in self._known:
            return self._known[id(value)][1]
        if kind is FunctionType:
            return self._function(value)
        if isinstance(value, type):
            return self._class(value)
        if is_compiled(value):
            return self._compiled(value)
        if kind is tuple or kind is frozenset:
            made = kind(map(self.exchanged, value))
            return self._known.setdefault(id(value), (value, made))[1]
        if kind in (list, dict, set):
            return self._container(value, self.keep(value, kind()))
        if kind is np.ndarray:
            return self.keep(value, self._array(value))
        for found in (self._wrapper(value), self._bound(value)):
            if found is not None:
                return found
        return self._object(value)

    def keep(self, value: Any, made: Any) -> Any:
        """Return the copy of a value that every further meeting gives: the first one, if there is one."""
        return self._known.setdefault(id(value), (value, made))[1]

    def is_own_class(self, kind: type) -> bool:
        """Whether a class is one of the function's module, or one inside a function of a listed module."""
        module = getattr(kind, "__module__", None)
        if not isinstance(module, str) or not kind.__flags__ & ON_HEAP:
            return False
        return self._copies.counterpart(kind) is None and (module == self._own or self._copies.sources.copies(module))

    def refuse(self, value: Any, reason: str) -> KernelError:
        """Return the error for something that cannot be copied, to be raised."""
        place, module = ".".join(self._trail), listed_name(self._own)
        return KernelError(
            f"{place}: {_described(value)} cannot be copied for each format: {reason}. "
            f"Accepted: {module} in kernel.modules, which executes it anew; or make it inside the kernel"
        )

    def _part(self, name: str, value: Any) -> Any:
        """Return what stands for a named part of what is being copied."""
        self._trail.append(name)
        made = self.exchanged(value)
        self._trail.pop()
        return made

    def _function(self, source: FunctionType) -> Any:
        found = self._copies.counterpart(source)
        if isinstance(found, FunctionType):
            return found
        if source.__globals__ is self._home and not self._copies.sources.copies(self._own):
            return self._copied(source, self._names)
        module = str(source.__globals__.get("__name__"))
        if self._copies.sources.copies(module):  # one that was made inside a function of a listed module
            return self._copied(source, vars(self._copies.load(module)))
        found = self._standin_of(source)
        if found is not source:
            return found
        if source.__code__ is _DISPATCHER:
            return self._dispatching(source)
        return self._copied(source, source.__globals__) if holds(source, self._is_met) else source

    def _copied(self, source: FunctionType, names: dict[str, Any]) -> FunctionType:
        closure = source.__closure__
        cells = None if closure is None else tuple(self.keep(cell, CellType()) for cell in closure)
        made = FunctionType(source.__code__, names, source.__name__, None, cells)
        self.keep(source, made)
        if self._setting is not None and names is not source.__globals__:
            self._setting.files.add(source.__code__.co_filename)
        if names is self._names:
            self._take(_names(source.__code__))
        for name, cell in zip(source.__code__.co_freevars, closure or (), strict=True):
            try:
                content = cell.cell_contents
            except ValueError:  # not assigned yet
                continue
            self._known[id(cell)][1].cell_contents = self._part(name, content)
        made.__defaults__ = source.__defaults__ and tuple(map(self.exchanged, source.__defaults__))
        made.__kwdefaults__ = source.__kwdefaults__ and self.exchanged(source.__kwdefaults__)
        made.__dict__.update({name: self._part(name, item) for name, item in source.__dict__.items()})
        made.__module__, made.__qualname__, made.__doc__ = source.__module__, source.__qualname__, source.__doc__
        return made

    def _take(self, names: set[str]) -> None:
        """Put names of the function's module into the new namespace; all of them where text is executed."""
        for name in names & (self._home.keys() - self._taken):
            self._taken.add(name)
            self._names[name] = self._part(name, self._home[name])
        for name in self._home.keys() - self._taken if names & _BY_TEXT else ():
            self._taken.add(name)
            depth = len(self._trail)
            try:
                self._names[name] = self._part(name, self._home[name])
            except KernelError:  # missed where it is asked for
                del self._trail[depth:]

    def _class(self, kind: type) -> Any:
        if self.is_own_class(kind):
            return self._classes.copied(kind, self.keep)
        found = self._copies.counterpart(kind)
        return self._standin_of(kind) if found is None else found

    def _compiled(self, value: Any) -> Any:
        original = value.py_func
        if original.__globals__ is self._home and not self._copies.sources.copies(self._own):
            self._copies.compiled.add(f"{original.__module__}.{original.__qualname__}")
            return self.exchanged(original)
        return exchanged_compiled(value, self._setting, self._copies.counterpart)

    def _container(self, value: Any, made: Any) -> Any:
        if isinstance(made, list):
            made.extend(map(self.exchanged, value))
        elif isinstance(made, set):
            made.update(map(self.exchanged, value))
        else:
            made.update((self.exchanged(key), self.exchanged(item)) for key, item in value.items())
        return made

    def _array(self, value: np.ndarray[Any, Any]) -> Any:
        """Return a copy of an array; floats are constants of the state, as in a module that is executed anew.

        A view of an array becomes one of its copy, so that what is written into one of them is seen in the other.
        """
        if type(value.base) is np.ndarray:
            view = _viewed(value, self.exchanged(value.base))
            if view is not None:
                return view
        if value.dtype == np.float64 and self._setting is not None:
            return as_state(value, self._setting)
        made = value.copy("K")
        if value.dtype.hasobject and value.dtype.names is None:
            for place in np.ndindex(value.shape):
                made[place] = self.exchanged(value[place])
        return made

    def _wrapper(self, value: Any) -> Any:
        """Return a new one of what wraps functions or other values without showing them to copy; None for others."""
        kind = type(value)
        if kind is functools._lru_cache_wrapper:
            found = self._copies.counterpart(value)
            if found is None:
                target = self.exchanged(value.__wrapped__)
                found = self.keep(value, functools.lru_cache(**value.cache_parameters())(target))
                found.__dict__.update(self.exchanged({**vars(value), "__wrapped__": target}))
            return found
        if kind in (classmethod, staticmethod):
            return self.keep(value, kind(self.exchanged(value.__func__)))
        if isinstance(value, property):
            parts = (self.exchanged(part) for part in (value.fget, value.fset, value.fdel))
            return self.keep(value, kind(*parts, value.__doc__))
        if kind is MappingProxyType:
            return self.keep(value, MappingProxyType(self.exchanged(gc.get_referents(value)[0])))
        if kind is weakref.ref:
            return self.keep(value, weakref.ref(self.exchanged(value())) if value() is not None else value)
        if kind in _WEAK:
            made = self.keep(value, kind())
            return self._container({*value} if kind is weakref.WeakSet else dict(value), made)
        return None

    def _dispatching(self, source: Any) -> Any:
        """Return a new functools.singledispatch of the copies of what is registered."""
        first = source.registry[object]

        def unregistered(*given: Any, **named: Any) -> Any:
            raise AssertionError  # replaced below, once what is registered may lead back here

        unregistered.__name__ = first.__name__
        made = self.keep(source, functools.singledispatch(unregistered))
        for kind, function in source.registry.items():
            made.register(self.exchanged(kind), self.exchanged(function))
        functools.update_wrapper(made, self.exchanged(first))
        rest = vars(source).keys() - vars(made).keys()
        made.__dict__.update({name: self._part(name, vars(source)[name]) for name in rest})
        return made

    def _bound(self, value: Any) -> Any:
        """Return the method of the copy of what a method is bound to; None for all else."""
        if not isinstance(value, (BuiltinMethodType, MethodType, MethodWrapperType)):
            return None
        owner = value.__self__
        if owner is None or isinstance(owner, ModuleType):
            return self._standin_of(value)
        if isinstance(owner, GENERATORS) and (self._setting is not None or self._copies.draws is not None):
            return self._standin_of(value)
        if not isinstance(value, MethodType):
            made = self.exchanged(owner)
            return value if made is owner else getattr(made, value.__name__)
        made, function = self.exchanged(owner), value.__func__
        if getattr(type(owner), value.__name__, None) is function or isinstance(owner, type):
            return value if made is owner else getattr(made, value.__name__)
        return MethodType(self.exchanged(function), made)

    def _object(self, value: Any) -> Any:
        """Return what stands for an object, by what its class is."""
        kind = type(value)
        if kind is ModuleType or isinstance(value, ModuleType):
            if vars(value) is self._home and not self._copies.sources.copies(self._own):
                raise self.refuse(value, "the function reaches its own module as a whole")
            return self._standin_of(value)
        if isinstance(value, np.ufunc) and value.__name__.endswith("(vectorized)"):  # by np.frompyfunc
            raise self.refuse(value, "the function inside it cannot be exchanged")
        if isinstance(value, GENERATORS):  # plain NumPy's run, too, leaves the user's alone
            plain = self._setting is None and self._copies.draws is None
            return self.keep(value, copy.deepcopy(value) if plain else self._standin_of(value))
        new = self._class(kind) if self._is_met(value) else kind
        if new is not kind:
            made = instance_of(new, value, self.exchanged, self.keep)
            return self._rebuilt(value) if made is None else made
        found = self._standin_of(value)
        if found is not value or _is_shared(value):
            return found
        if kind.__module__ in _TRANSPARENT:
            return self._rebuilt(value)
        below = reached(value, self._is_met, _is_shared)
        memo = {id(one): one if is_shared else self.exchanged(one) for one, is_shared in below}
        try:
            return self.keep(value, copy.deepcopy(value, memo))
        except Exception as problem:  # whatever the class of the object raises
            raise self.refuse(value, f"{type(problem).__name__}: {said(problem)}") from None

    def _rebuilt(self, value: Any) -> Any:
        try:
            return rebuilt(value, self.exchanged, self.keep)
        except KernelError:
            raise
        except Exception as problem:  # whatever the class of the object raises
            raise self.refuse(value, f"{type(problem).__name__}: {said(problem)}") from None

    def _is_met(self, value: Any) -> bool:
        """Whether a value belongs to the function's module or a listed one, or must be the copy's own for its kind."""
        if isinstance(value, FunctionType):
            module = value.__globals__.get("__name__")
            return value.__globals__ is self._home or self._copies.sources.copies(str(module))
        if isinstance(value, type):
            return self.is_own_class(value) or self._copies.counterpart(value) is not None
        if isinstance(value, (functools._lru_cache_wrapper, *GENERATORS)) or is_compiled(value):
            return True
        if isinstance(value, MethodType):
            return self._is_met(value.__func__) or self._is_met(value.__self__)
        return self._is_met(type(value))


def _viewed(value: np.ndarray[Any, Any], copied: Any) -> Any:
    """Return the view of a copied base that an array is of its base; None where there is no such view."""
    base: Any = value.base
    memory = copied._carrier if isinstance(copied, Array) else copied
    step = base.itemsize
    offset = value.__array_interface__["data"][0] - base.__array_interface__["data"][0]
    alike = value.dtype == base.dtype and memory.strides == tuple(s // step * memory.itemsize for s in base.strides)
    if not alike or not base.flags.forc or any(number % step for number in (offset, *value.strides)):
        return None
    made: Any = np.ndarray(
        value.shape,
        memory.dtype,
        memory.ravel("K"),  # no copy: it is contiguous in one of the two orders
        offset // step * memory.itemsize,
        tuple(stride // step * memory.itemsize for stride in value.strides),
    )
    if not isinstance(copied, Array):
        return made
    changing(copied)
    return Array(made, copied._setting)


def _names(code: CodeType) -> set[str]:
    """Return the names of its module that a code object, and the code inside it, reads or sets."""
    found = {one.argval for one in dis.get_instructions(code) if one.opname in _GLOBAL}
    return found.union(*(_names(inner) for inner in code.co_consts if isinstance(inner, CodeType)))


def _is_shared(value: Any) -> bool:
    return isinstance(value, _SHARED) or type(value).__module__ == "typing" or is_named(value)


def _described(value: Any) -> str:
    name = getattr(value, "__name__", None)
    return f"{type(value).__name__} {name}" if isinstance(name, str) else f"a {type(value).__name__}"
