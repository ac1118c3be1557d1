"""Operators and ufuncs of arrays by the shortest way, against the general one that an observer asks for."""

from __future__ import annotations

import numpy as np
import pytest
from kernel_runs import module_of, owned, same, values_of

from narrowgauge.dispatch.setting import Wrapped
from narrowgauge.errors import SettingsMixedError

FORMS = ("float16", "bfloat16", "float32", "float64", "tf32", "e4m3")
OTHERS = (
    "y", "x", "x[::-1]", "x[2]", "x[1:2]", "x.reshape(6, 1)", "x[:0]", "z", "z[()]", "0.3", "-0.0", "0.0", "0", "3",
    "2", "7e5", "1e-9", "float('nan')", "float('inf')", "True", "np.float64(0.3)", "np.float32(0.3)", "np.int64(3)",
    "np.bool_(True)", "np.linspace(0.1, 0.9, 6)", "[0.1] * 6", "x > 0.5",
)  # fmt: skip
SYMBOLS = ("+", "-", "*", "/", "**", "<", "<=", ">", ">=")
FUNCTIONS = ("add", "divide", "maximum", "minimum", "arctan2", "power", "less", "copysign", "fmod")
ALONE = ("sqrt", "exp", "log", "square", "negative", "abs", "floor", "isnan", "reciprocal", "sin")


class Counted:
    """An observer that counts operations."""

    def __init__(self):
        self.operations = 0

    def saw(self, setting, operation, route, operands, result):
        self.operations += 1

    def met(self, setting, constant):
        pass

    def decided(self, setting, answer):
        pass

    def left(self, setting, way):
        pass


def text_of(lines):
    """A kernel that keeps the result of every line, or what it raises."""
    tried = "".join(f"        lambda: {line},\n" for line in lines)
    return f"""
import numpy as np

def changed(target, work):
    work(target)
    return target

def tried(work):
    try:
        return work()
    except (ArithmeticError, IndexError, TypeError, ValueError) as problem:
        return type(problem).__name__

def kernel(x, y):
    z = x[1, ...]
    return [tried(work) for work in (
{tried}    )]
"""


LINES = (
    [f"{left} {symbol} ({right})" for symbol in SYMBOLS for right in OTHERS for left in ("x", "z", "x.reshape(2, 3)")]
    + [f"({left}) {symbol} x" for symbol in SYMBOLS for left in OTHERS]
    + [f"np.{name}(x, {other})" for name in FUNCTIONS for other in OTHERS]
    + [f"np.{name}({other}, x)" for name in FUNCTIONS for other in OTHERS]
    + [f"np.{name}({other})" for name in ALONE for other in ("x", "z", "x[::2]", "x[2]", "x[:0]")]
    + [f"np.{name}(x, {other}, out=np.zeros_like(x))" for name in FUNCTIONS for other in OTHERS]
    + [f"np.sqrt({other}, out=np.zeros_like(x))" for other in OTHERS]
    + [f"np.add(x, y, {keyword})" for keyword in ("where=x > 0.5, out=np.zeros_like(x)", "dtype=float", "out=None")]
)
IN_PLACE = [
    f"changed(x{view}.copy()[::-1], lambda w: w.__{name}__({other}))"
    for name in ("iadd", "isub", "imul", "itruediv", "ipow", "ifloordiv", "imod")
    for other in OTHERS
    for view in ("", ".reshape(6, 1)")
]


def run(lines, form, observer=None):
    """The results of lines on two arrays of the state, with every kind of value in them."""
    module, setting = module_of(text_of(lines), form, observer)
    x, y = np.array([0.3, -1.7, 0.0, -0.0, 2e-5, 300.0]), np.array([1.1, 0.6, -0.0, 0.0, np.inf, np.nan])
    with np.errstate(all="ignore"):
        return module.kernel(owned(x, setting), owned(y, setting)), setting


@pytest.mark.parametrize("lines", [LINES, IN_PLACE], ids=["operators and ufuncs", "in place"])
@pytest.mark.parametrize("form", FORMS)
def test_the_shortest_way_gives_what_the_general_one_gives(form, lines):
    """The same kinds of values, with the same layout and the same bits; the observer has seen the operations."""
    observer = Counted()
    short, setting = run(lines, form)
    general, watched = run(lines, form, observer)
    assert watched.direct == {}
    assert setting.direct != {}
    assert observer.operations > len(lines) / 2
    pairs = list(zip(lines, short, general, strict=True))
    assert sum(isinstance(one, Wrapped) for one in values_of(short)) > len(lines) / 2
    for line, one, other in pairs:
        assert type(one) is type(other), line
        if isinstance(one, Wrapped):
            assert same(one._carrier, other), line
        else:
            assert one == other, line


@pytest.mark.parametrize("work", ["x + y", "x * y", "x < y", "np.add(x, y)", "x.__iadd__(y)", "np.sqrt(x, out=y)"])
def test_arrays_of_two_runs_do_not_meet(work):
    """The shortest way is for arrays of one run only."""
    module, setting = module_of(f"import numpy as np\ndef kernel(x, y):\n    return {work}\n", "float16")
    other = module_of("", "float16")[1]
    with pytest.raises(SettingsMixedError):
        module.kernel(owned(np.ones(3), setting), owned(np.ones(3), other))


def test_squares_are_rounded_once():
    """x ** 2 of every value of binary16, by the shortest way: the square in float64, rounded by NumPy."""
    every = np.arange(2**16, dtype=np.uint16).view(np.float16).astype(np.float64)
    every = every[np.isfinite(every)]
    module, setting = module_of("def kernel(x):\n    return x ** 2\n", "float16")
    with np.errstate(all="ignore"):
        found = module.kernel(owned(every, setting))._carrier
        assert np.array_equal(found, (every * every).astype(np.float16).astype(np.float32))
