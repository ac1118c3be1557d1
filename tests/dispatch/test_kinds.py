"""`type` in a private copy: the answers of plain code for values that stand in, and Python's own `type` besides."""

from __future__ import annotations

import abc
import textwrap

import numpy as np
import pytest
from kernel_runs import call, module_of, owned
from private_packages import sources_of

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import copy_function, new_setting
from narrowgauge.dispatch.importing import Copies
from narrowgauge.dispatch.kinds import TYPE

DRAWS = np.array([0.2, 1.4, 0.75])

# What a kernel asks by type; True or False as in plain code.
QUESTIONS = """
    import builtins
    import functools
    import numpy as np
    from builtins import type as other
    KINDS = {np.ndarray: "array", np.float64: "number", float: "number", np.bool_: "truth", type: "type", str: "text"}

    class Meta(type):
        made = []
        def __new__(mcs, name, bases, names, **more):
            kind = super().__new__(mcs, name, bases, names)
            Meta.made.append(name)
            return kind
        def __init__(cls, name, bases, names, **more):
            super().__init__(name, bases, names)
        def __call__(cls, *given):
            one = super().__call__(*given)
            return one
        def __instancecheck__(cls, one):
            return type.__instancecheck__(cls, one)

    class Model(metaclass=Meta):
        def same(self, other):
            return type(self) is type(other)

    class Inner(Model, extra=3): pass
    class Plain(metaclass=type): pass
    class Number(float): pass
    class Further(Meta): pass

    def first(x: type[int] | None = None, kind: type = type): return kind

    @functools.singledispatch
    def told(v): return "other"
    @told.register
    def _(v: np.ndarray): return "array"
    @told.register(type)
    def _(v): return "type"

    def kernel(x):
        s, n, b = x[0], (x * 4).astype(int), x > 1
        made = type("Made", (Model,), {"k": 3})
        match x:
            case np.ndarray(): matched = True
            case _: matched = False
        match Model:
            case type(): of_type = True
            case _: of_type = False
        return [
            type(x) is np.ndarray, type(x) == np.ndarray, type(s) in (float, np.float64), type(s).__name__,
            KINDS[type(x)], KINDS[type(s)], type(x).__name__, type(n) is np.ndarray, type(b) is np.ndarray,
            type(b[0]) is np.bool_, type(n[0]) is np.int64, type(x) is list, type(x) is type(x * 2),
            builtins.type(x) is np.ndarray, other(s) is type(x[1]), type(f"{s:.1f}") is str,
            KINDS[type(str(s))], type(3.0) is float, type([x]) is list, isinstance(x, type), isinstance(int,
            type), isinstance(Model, type), issubclass(Meta, type), issubclass(int, type), type(int) is type,
            type(type) is type, type(Meta) is type, type(Model) is Meta, type(Model()) is Model, type(Plain) is
            type, type(Number(3)) is Number, Model().same(Inner()), Inner().same(Inner()), isinstance(Inner(),
            Model), isinstance(3, Model), Meta.made, made.__name__, made.__module__ == __name__, made().k,
            type(made) is Meta, type("Bare", (), {}).__module__ == __name__, type(type("B", (object,), {})) is
            type, first() is type, KINDS[type(Model.__class__)], {type: 1}[type(int)], told(x), told(Plain),
            matched, of_type, str(type), type.__name__, type.__call__(int, "3"), type.mro(int) == int.mro(),
            len({type, type(int)}), type == type(int), type(Further) is type, callable(type), type(None) is
            type(None), type[int] == type[int],
        ]
"""


@pytest.mark.parametrize("form", ["float64", "float16"])
def test_type_answers_as_in_plain_code(form):
    """Of arrays, numbers, integers, truths and texts of the state, of classes and metaclasses, and as a base."""
    plain, _, _ = call(QUESTIONS, None, DRAWS)
    emulated, setting, _ = call(QUESTIONS, form, DRAWS)
    assert setting.faults == []
    assert [*zip(range(99), emulated, strict=False)] == [*zip(range(99), plain, strict=False)]


def test_type_in_a_function_handed_over():
    """By its name, as a default argument and in the methods of its module's classes."""
    namespace = {"__name__": "users"}
    text = """
        import numpy as np
        class Model:
            def is_array(self, v): return type(v) is np.ndarray
        class Meta(type): pass
        class Own(metaclass=Meta): pass
        def kernel(x, kind=type):
            return [type(x) is np.ndarray, kind(x[0]) is np.float64, Model().is_array(x), type(Model) is type,
                    type(Own) is Meta, type(Own()) is Own, isinstance(Own, type), kind is type]
    """
    exec(textwrap.dedent(text), namespace)
    setting = new_setting(arithmetic_named("float16"))
    assert copy_function(namespace["kernel"], setting)(owned(DRAWS, setting)) == [True] * 8
    assert namespace["kernel"](DRAWS) == [True] * 8


def test_type_is_pythons_own_where_nothing_stands_in(tmp_path):
    """A run in plain NumPy without a tape meets Python's `type`."""
    assert Copies(None, sources_of(tmp_path)).builtins({})["type"] is type
    module, _ = module_of("KIND = type", "float16")
    assert module.KIND is TYPE


def test_the_stand_in_is_a_class_like_type():
    """It can be mixed with other metaclasses, and the wrong number of arguments is Python's own error."""

    class Mixed(TYPE, abc.ABCMeta):
        pass

    class Made(metaclass=Mixed):
        pass

    assert isinstance(Made, Mixed)
    assert isinstance(Mixed, type)
    assert Mixed != TYPE
    assert hash(Mixed) != hash(TYPE)
    for given in ((), (1, 2), ("A", (), 3)):
        with pytest.raises(TypeError):
            TYPE(*given)
    assert (TYPE | None) == (type | None)
