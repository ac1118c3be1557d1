"""The namespaces that a private copy meets instead of numpy, builtins and dataclasses.

NumPy's functions hand over to the wrapped array by NumPy's protocols; lists.py makes arrays of lists for them. What
makes arrays out of nothing must differ: a plain buffer would coerce the state that is stored into it. Time grids
(linspace, arange) and arrays of given integers stay plain, and exact, until they meet the state; buffers of integers
(zeros, ones, empty, full) belong to the state.
"""

from __future__ import annotations

import builtins
import dataclasses
import importlib
from collections.abc import Callable
from types import ModuleType
from typing import Any

import numpy as np

from narrowgauge.dispatch.array import Array, Constant, Flat, as_state, carrier_of, constant
from narrowgauge.dispatch.builders import builders
from narrowgauge.dispatch.casts import ignored_casts
from narrowgauge.dispatch.exact import Exact, bare, is_exact
from narrowgauge.dispatch.functions import call_function
from narrowgauge.dispatch.lists import taking_lists
from narrowgauge.dispatch.namespaces import Exchanging, Namespace
from narrowgauge.dispatch.scalar import State
from narrowgauge.dispatch.setting import Setting, Wrapped, holds
from narrowgauge.errors import RefusedError

__all__ = [
    "NO_DRAWS",
    "builtins_namespace",
    "dataclasses_namespace",
    "numpy_namespace",
    "refusing_generator",
    "refusing_namespace",
]

NO_DRAWS = "the kernel takes its random numbers as its first argument, so that every format sees the same"


class _Refusing(ModuleType):
    """A module that may be imported, whose every public name is a type that refuses to be called."""

    def __init__(self, plain: ModuleType, setting: Setting) -> None:
        super().__init__(plain.__name__)
        public = getattr(plain, "__all__", None) or [name for name in vars(plain) if name[0] != "_"]
        self.__dict__["__all__"] = public
        for name in public:  # types, since annotations and isinstance() need some of them
            self.__dict__[name] = _refusing(f"{plain.__name__}.{name}", setting)


def _refusing(name: str, setting: Setting) -> type:
    def refuse(*arguments: Any, **keywords: Any) -> Any:
        raise setting.fault(RefusedError, f"{name} is not offered by this version: {NO_DRAWS}")

    return type(name.rpartition(".")[2], (), {"__new__": refuse})


class _RefusedGenerator:
    """What a generator, or one of its methods, becomes in a function that was handed over from Python."""

    def __init__(self, name: str, setting: Setting) -> None:
        self._name, self._setting = name, setting

    def __call__(self, *arguments: Any, **keywords: Any) -> Any:
        raise self._setting.fault(RefusedError, f"{self._name} is not offered by this version: {NO_DRAWS}")

    def __getattr__(self, name: str) -> Any:
        if name.startswith("__"):
            raise AttributeError(name)
        return _RefusedGenerator(f"{self._name}.{name}", self._setting)


def refusing_namespace(name: str, setting: Setting) -> ModuleType:
    """Return a stand-in for a module of random numbers, whose names are refused when they are called."""
    return _Refusing(importlib.import_module(name), setting)


def refusing_generator(name: str, setting: Setting) -> Any:
    """Return a stand-in for a generator of random numbers or one of its methods, refused when it is called."""
    return _RefusedGenerator(name, setting)


def dataclasses_namespace(names: dict[str, Any]) -> ModuleType:
    """Return a stand-in for `dataclasses` for a module of these names that is not in sys.modules.

    Python's own looks the words of `from __future__ import annotations` up there, so they are evaluated beforehand.
    """

    def evaluated(annotation: Any, cls: type) -> Any:
        try:
            return eval(annotation, names, dict(vars(cls))) if isinstance(annotation, str) else annotation
        except (AttributeError, NameError, SyntaxError, TypeError):  # for type checkers only
            return Any

    def dataclass(cls: type | None = None, /, **options: Any) -> Any:
        def decorate(given: type) -> type:
            known = vars(given).get("__annotations__", {})
            given.__annotations__ = {name: evaluated(annotation, given) for name, annotation in known.items()}
            return dataclasses.dataclass(**options)(given)

        return decorate if cls is None else decorate(cls)

    return Namespace(dataclasses, {"dataclass": dataclass})


def builtins_namespace(setting: Setting) -> ModuleType:
    """Return a stand-in for `builtins` whose `max` and `min` make a constant that they choose over the state its own.

    A float is rounded once, an integer becomes an exact value.
    """

    def stand_in(plain: Callable[..., Any]) -> Callable[..., Any]:
        def function(*arguments: Any, **keywords: Any) -> Any:
            values = list(arguments[0]) if len(arguments) == 1 else list(arguments)
            chosen = plain(values, **keywords)
            if isinstance(chosen, Wrapped) or not holds(values, Wrapped):
                return chosen
            if isinstance(chosen, (int, np.integer, np.bool_)):
                return setting.wrap(chosen)
            if not isinstance(chosen, (float, np.floating)):
                return chosen
            constant = setting.admit(chosen)
            return setting.wrap(constant if constant is chosen else setting.arithmetic.format.carrier.type(constant))

        return function

    return Namespace(builtins, {"max": stand_in(max), "min": stand_in(min)})


def numpy_namespace(setting: Setting, random: ModuleType) -> ModuleType:
    """Return a stand-in for `numpy` with its `random`; its creators give arrays of the state and exact values."""
    names: dict[str, Any] = {
        "arange": _arange(setting),
        "array": _array(setting),
        "full": _full(setting),
        "take": _take(setting),
        "where": _where(setting),
        "random": random,
    }
    for name in ("empty", "ones", "zeros"):
        names[name] = _creator(setting, getattr(np, name))
    for name in ("empty_like", "full_like", "ones_like", "zeros_like"):
        names[name] = _like(setting, getattr(np, name))
    for name, order, ndmin in (
        ("asanyarray", None, 0),
        ("asarray", None, 0),
        ("ascontiguousarray", "C", 1),
        ("asfortranarray", "F", 0),
    ):
        names[name] = _as_array(names["array"], order, ndmin)
    names |= builders(setting, names["array"]) | ignored_casts(setting)
    made = Exchanging(np, taking_lists(names["array"]))
    made.__dict__.update(names)
    return made


def _refuse_others(setting: Setting, name: str, others: dict[str, Any]) -> None:
    for other, value in others.items():
        if value is not None:
            raise setting.fault(RefusedError, f"{other}= of np.{name} is not offered by this version")


def _of_objects(dtype: Any) -> bool:
    """Whether a buffer is to hold Python objects: it stays plain, since values of the state stay in it as they are.

    A conversion of it to floats asks each value for a float, which is refused.
    """
    return dtype is not None and np.dtype(dtype) == object


def _creator(setting: Setting, make: Callable[..., Any]) -> Callable[..., Any]:
    def function(shape: Any, dtype: Any = None, order: Any = "C", **others: Any) -> Any:
        _refuse_others(setting, make.__name__, others)
        if make is np.empty and _of_objects(dtype):
            return make(shape, object, order)
        if setting.float_dtype(dtype) is None:
            return setting.wrap(make(shape, dtype, order))
        made = make(shape, setting.arithmetic.format.carrier, order)
        if make is np.empty:
            made.fill(np.nan)  # what is read before it is written must not pass for a value of the format
            return Array(made, setting)
        return Constant(made, setting, 1.0 if make is np.ones else 0.0)

    return function


def _full(setting: Setting) -> Callable[..., Any]:
    def full(shape: Any, fill_value: Any, dtype: Any = None, order: Any = "C", **others: Any) -> Any:
        _refuse_others(setting, "full", others)
        if _of_objects(dtype) or (dtype is None and fill_value is None):
            return np.full(shape, fill_value, object, order)
        # NumPy makes integers or booleans of integers or booleans: they stay exact
        exact = dtype is None and is_exact(fill_value, setting)
        if exact or (dtype is not None and setting.float_dtype(dtype) is None):
            return setting.wrap(np.full(shape, bare(fill_value, setting), dtype, order))
        made = np.full(shape, carrier_of(fill_value, setting), setting.arithmetic.format.carrier, order)
        return Constant(made, setting, fill_value) if isinstance(fill_value, float) else Array(made, setting)

    return full


def _like(setting: Setting, function: Callable[..., Any]) -> Callable[..., Any]:
    def like(model: Any, *arguments: Any, **keywords: Any) -> Any:
        return call_function(setting, function, (model, *arguments), keywords)

    return like


def _array(setting: Setting) -> Callable[..., Any]:
    def array(
        value: Any, dtype: Any = None, *, copy: Any = True, order: Any = "K", ndmin: int = 0, **others: Any
    ) -> Any:
        _refuse_others(setting, "array", others)
        if setting.casts is not None and dtype is not None:
            dtype = setting.float_dtype(dtype) or dtype
        if isinstance(value, Flat):
            value = value.copy()
        if not holds(value, State):
            plain = np.array(bare(value, setting), dtype, copy=copy, order=order, ndmin=ndmin)
            if plain.dtype.kind in "iu" and not holds(value, Wrapped):
                return plain
            if plain.dtype.kind != "f":
                return setting.wrap(plain)
            setting.float_dtype(dtype)
            return constant(plain, setting, kept=isinstance(value, (list, tuple)))
        if setting.float_dtype(dtype) is None:
            wanted = str(np.dtype(dtype))
            raise setting.fault(
                RefusedError, f"np.array of the state with dtype {wanted}; accepted: .astype({wanted!r})"
            )
        carrier = carrier_of(value, setting)
        wide = setting.arithmetic.format.carrier
        made = np.array(carrier, wide, copy=copy, order=order, ndmin=ndmin)
        if isinstance(value, Array) and made is carrier:
            return value
        if type(value) is Constant and made.shape == value.shape:
            return Constant(made, setting, value._plain)
        return Array(made, setting)

    return array


def _arange(setting: Setting) -> Callable[..., Any]:
    def arange(*placed: Any, **keywords: Any) -> Any:
        made = np.arange(*bare(placed, setting), **bare(keywords, setting))
        if not holds([*placed, keywords], Exact):
            return made
        return as_state(made, setting) if made.dtype.kind == "f" else setting.wrap(made)

    return arange


def _take(setting: Setting) -> Callable[..., Any]:
    plain: Callable[..., Any] = np.take

    def take(a: Any, indices: Any, *placed: Any, **keywords: Any) -> Any:
        if holds(a, Wrapped) or not holds(indices, Exact) or holds(indices, State):
            return plain(a, indices, *placed, **keywords)
        table = np.asarray(a)  # constants, which become those of the state by the key
        own = as_state(table, setting) if table.dtype.kind == "f" else setting.wrap(table)
        return plain(own, indices, *placed, **keywords)

    return take


def _as_array(array: Callable[..., Any], order: Any, ndmin: int) -> Callable[..., Any]:
    def as_array(value: Any, dtype: Any = None, *placed: Any, **keywords: Any) -> Any:
        given = dict(zip(("order",), placed, strict=False)) | keywords
        given.setdefault("copy", None)
        given["order"] = order or given.get("order") or "K"
        return array(value, dtype, ndmin=ndmin, **given)

    return as_array


def _where(setting: Setting) -> Callable[..., Any]:
    def where(condition: Any, *values: Any) -> Any:
        if not holds((condition, *values), Wrapped) and all(is_exact(value, setting) for value in values):
            return np.where(condition, *values)
        return call_function(setting, np.where, (condition, *values), {})

    return where
