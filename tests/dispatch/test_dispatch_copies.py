"""Private copies: every spelling meets the stand-ins, and nothing of the user's is changed."""

from __future__ import annotations

import copy
import functools
import sys
import textwrap
from types import ModuleType

import numpy as np
import pytest
from kernel_runs import FILE, module_of, owned, same, unheld

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.copies import PrivateCopy, copy_function, copy_module, new_setting
from narrowgauge.errors import EscapeError, KernelError, RefusedError

DRAWS = np.array([0.2, 1.4, 0.75])

USERS = """
    from __future__ import annotations
    import math
    import random
    import numpy as np
    from numpy import exp, full
    from numpy.random import normal

    RATE = 0.3
    WEIGHTS = np.array([0.1, 0.2, 0.3])
    TABLE = {"exp": np.exp, "make": np.zeros, "parts": [np.ones]}
    TABLE["self"] = TABLE
    CACHE = {}
    SEEN = []
    NAMES = {"a"}
    COUNT = 0
    RNG = np.random.default_rng(3)

    def count():
        global COUNT
        COUNT += 1
        return COUNT

    def inner(x, _exp=np.exp, *, make=np.zeros):
        v = make(3)
        v[:] = _exp(x)
        return v

    def outer():
        total, root = 0, math.sqrt
        def add(x):
            nonlocal total
            total += 1
            return x * root(x[0])
        def read():
            return total
        return add, read

    add, read = outer()

    def even(n):
        return True if n == 0 else odd(n - 1)

    def odd(n):
        return False if n == 0 else even(n - 1)

    def kernel(x, factor=RATE, seen=SEEN, *, table=TABLE):
        import numpy
        from math import exp as scalar_exp
        count()
        kernel.calls += 1
        v = table["make"](3)
        v += WEIGHTS * x * factor
        CACHE["v"] = v
        seen.append(v)
        NAMES.add("b")
        WEIGHTS[0] = 5.0
        out = [v, table["exp"](x), TABLE["self"]["parts"][0](2), inner(x), add(x), full(2, 0.1), scalar_exp(x[0]),
               numpy.zeros(2), exp(x), np.array([x[0], 0.1]), min(x[0], 0.1), count(), read(), even(4), kernel.calls]
        return out

    kernel.calls = 0

    def draw(x):
        return x + RNG.normal()

    def draw_by_name(x):
        return x + normal()

    def draw_by_module(x):
        return x + random.gauss(0, 1)

    def late(x):
        def never():
            return unassigned
        if False:
            unassigned = 1
        return never, x
"""


@pytest.fixture
def users():
    """A module as the user's program has it, in plain NumPy."""
    module = ModuleType("users")
    exec(compile(textwrap.dedent(USERS), FILE, "exec", dont_inherit=True), module.__dict__)
    return module


def snapshot(module):
    """Everything of a module that a copy could have changed, by identity and by content."""
    held = dict(vars(module))
    functions = {
        name: (f.__code__, f.__globals__, f.__defaults__, copy.copy(f.__kwdefaults__), f.__closure__,
               [cell.cell_contents for cell in f.__closure__ or ()], dict(f.__dict__))
        for name, f in held.items() if callable(f) and hasattr(f, "__closure__")
    }  # fmt: skip
    contents = (dict(module.CACHE), list(module.SEEN), set(module.NAMES), module.WEIGHTS.tolist(), list(module.TABLE))
    return held, functions, contents, module.RNG.bit_generator.state


def test_a_copied_function_leaves_the_users_module_as_it_was(users):
    """Globals, defaults, closures, containers, arrays and sys.modules are the same objects with the same content."""
    setting = new_setting(arithmetic_named("float16"))
    copy_function(users.kernel, setting)(owned(DRAWS, setting))  # what compiles the arithmetic is imported
    before, modules, names = snapshot(users), dict(sys.modules), dict(vars(np))
    made = copy_function(users.kernel, setting)
    made(owned(DRAWS, setting))
    made(owned(DRAWS, setting))
    after = snapshot(users)
    assert after == before
    assert all(after[0][name] is before[0][name] for name in before[0])
    assert dict(sys.modules) == modules
    assert dict(vars(np)) == names
    assert made.__globals__ is not users.kernel.__globals__
    assert made.__globals__["inner"] is not users.inner
    assert made.__globals__["WEIGHTS"] is not users.WEIGHTS


@pytest.mark.parametrize("form", ["float16", "float64"])
def test_a_copied_function_meets_the_stand_ins_everywhere(users, form):
    """Names of the module, defaults, closures, tables and imports inside: all rounded; float64 gives plain bits."""
    setting = new_setting(arithmetic_named(form))
    result = copy_function(users.kernel, setting)(owned(DRAWS, setting))
    assert setting.faults == []
    if form == "float64":
        assert same(users.kernel(DRAWS.copy()), result)
    else:
        assert unheld(result, setting) == []


def test_functions_of_a_copy_share_one_namespace(users):
    """`global`, `nonlocal`, function attributes and recursion work among the copies as among the originals."""
    setting = new_setting(arithmetic_named("float16"))
    made = copy_function(users.kernel, setting)
    x = owned(DRAWS, setting)
    assert made(x)[-4:] == [2, 1, True, 1]
    assert made(x)[-4:] == [4, 2, True, 2]
    assert users.COUNT == users.kernel.calls == users.read() == 0
    assert made.__name__ == "kernel"
    assert made.__qualname__ == users.kernel.__qualname__
    again = copy_function(users.kernel, new_setting(arithmetic_named("float16")))
    assert again.calls == 0


@pytest.mark.parametrize(
    ("name", "what"),
    [("draw", "Generator.normal"), ("draw_by_name", "RandomState.normal"), ("draw_by_module", "random.gauss")],
)
def test_generators_of_the_users_module_are_refused(users, name, what):
    """A generator, one of its methods and a module of random numbers are refused when they are called."""
    setting = new_setting(arithmetic_named("float16"))
    made = copy_function(getattr(users, name), setting)
    with pytest.raises(RefusedError, match=f": {what} is not offered by this version: the kernel takes its random"):
        made(owned(DRAWS, setting))
    assert len(setting.faults) == 1


def test_an_empty_closure_cell_stays_empty(users):
    """A variable that is assigned later, or never, is unassigned in the copy too."""

    def unassigned_yet(x):
        return later

    setting = new_setting(arithmetic_named("float16"))
    made = copy_function(unassigned_yet, setting)
    with pytest.raises(NameError):
        made(1)
    later = 1
    assert unassigned_yet(0) == later
    assert copy_function(users.late, setting)(2)[1] == 2


def test_only_python_functions_are_copied():
    """What has no Python code is refused with what is accepted."""
    for thing in (np.exp, len, functools.partial(len), "kernel"):
        with pytest.raises(KernelError) as raised:
            copy_function(thing, new_setting(arithmetic_named("float16")))
        assert str(raised.value) == f"{thing!r} is not a Python function; accepted: a function defined with def"


def test_a_module_is_executed_anew_for_each_copy():
    """Two copies share nothing that the module made, and the module is in no table of Python's."""
    text = "import numpy as np\nSTATE = np.zeros(2)\nLOG = []\ndef kernel(x):\n    LOG.append(1)\n    return STATE\n"
    modules = dict(sys.modules)
    first, one = module_of(text, "float16")
    second, other = module_of(text, "float16")
    plain, none = module_of(text, None)
    first.kernel(0)
    assert (first.LOG, second.LOG, plain.LOG) == ([1], [], [])
    assert none is None
    assert type(plain.STATE) is np.ndarray
    assert isinstance(vars(first)["STATE"], Array)
    assert isinstance(vars(second)["STATE"], Array)
    assert (first.STATE._setting, second.STATE._setting) == (one, other)
    assert one.files == {FILE}
    assert sys.modules == modules


def test_star_imports_and_builtins():
    """Every public name is there after a star import, and max and min round the constant that they choose."""
    text = """
        import builtins
        from math import *
        from numpy import linspace
        biggest, smallest = max, min
        def kernel(x, largest=builtins.max, least=min):
            s = x[0]
            return [largest(s, 0.7), least([s, 0.1]), biggest(s, 1), smallest(0.1, 0.3),
                    biggest([1, 2], key=abs), biggest(x), smallest(s, s)]
        names = [pi, e, inf, nan, tau, gamma, erf, floor, ceil]
        from numpy import *
        names += [zeros, linspace, float64, ndarray, newaxis, errstate, random]
    """
    module, setting = module_of(text, "float16")
    result = module.kernel(owned(DRAWS, setting))
    assert unheld([result[0], result[1], result[5], result[6]], setting) == []
    assert result[0] == np.float16(0.7)
    assert result[1] == np.float16(0.1)
    assert result[2:5] == [1, 0.1, 2]
    assert type(result[3]) is float
    plain, _ = module_of(text, None)
    assert plain.max is not module.biggest


def test_dataclasses_of_a_module_that_is_not_in_pythons_table():
    """A dataclass under postponed annotations works in a copy, class variables and arguments of __init__ included."""
    text = """
        from __future__ import annotations
        import dataclasses
        from dataclasses import InitVar, dataclass, field
        from typing import TYPE_CHECKING, ClassVar
        import numpy as np
        if TYPE_CHECKING:
            from nowhere import Unknown

        @dataclass(frozen=True)
        class Model:
            rate: float
            count: ClassVar[int] = 7
            extra: InitVar[float] = 0.5
            weights: list[float] = field(default_factory=lambda: [0.1, 0.2])
            other: Unknown | None = None

            def __post_init__(self, extra):
                object.__setattr__(self, "other", extra)

        @dataclasses.dataclass
        class State:
            x: np.ndarray = field(default_factory=lambda: np.zeros(3))

        def kernel(x):
            model, state = Model(0.3), State()
            state.x += model.rate * x
            return state.x, model.count, model.other, [f.name for f in dataclasses.fields(model)]
    """
    for form in (None, "float16"):
        module, setting = module_of(text, form, name="not_imported_anywhere")
        state, *rest = module.kernel(owned(DRAWS, setting))
        assert rest == [7, 0.5, ["rate", "weights", "other"]]
        assert setting is None or unheld(state, setting) == []


@pytest.mark.parametrize("form", [None, "float16"])
@pytest.mark.parametrize(
    ("statement", "name", "listed"),
    [("import beside", "beside", "beside"), ("from beside import f", "beside", "beside"),
     ("from . import beside", ".", "package"), ("from .beside import f", ".beside", "package.beside"),
     ("import folder.part", "folder.part", "folder.part"), ("import package.other", "package.other", "package.other")],
)  # fmt: skip
def test_a_module_beside_the_kernel_is_refused(tmp_path, form, statement, name, listed):
    """In the kernel's folder or its package: refused by name, in plain NumPy too, so that both runs see the same."""
    (tmp_path / "beside.py").write_text("def f(): pass\n")
    (tmp_path / "folder").mkdir()
    (tmp_path / "folder" / "__init__.py").write_text("")
    setting = None if form is None else new_setting(arithmetic_named(form))
    code = compile(statement, str(tmp_path / "kernel.py"), "exec")
    words = (
        f"the kernel imports {name}, which lies beside it and is not listed: its NumPy would not be rounded. "
        f'Accepted: "{listed}" in kernel.modules, or in kernel.shared to run it as it is'
    )
    with pytest.raises(KernelError if form is None else RefusedError) as raised:
        copy_module(code, "package.kernel", setting)
    assert str(raised.value) == (words if form is None else f"{tmp_path / 'kernel.py'}:1: {words}")


def test_installed_modules_are_not_beside(tmp_path):
    """The standard library, NumPy and what is installed are imported, also where a file of that name lies beside."""
    (tmp_path / "json.py").write_text("raise RuntimeError\n")
    (tmp_path / "numpy.py").write_text("raise RuntimeError\n")
    code = compile("import json, numpy, scipy.stats\nfrom scipy.special import ndtr\n", str(tmp_path / "k.py"), "exec")
    for setting in (None, new_setting(arithmetic_named("float16"))):
        assert copy_module(code, "k", setting).json.dumps(1) == "1"
    beside_numpy = compile("import scipy, numpy.linalg", np.__file__.replace("numpy/__init__", "kernel"), "exec")
    assert copy_module(beside_numpy, "kernel", None).scipy.__name__ == "scipy"


def test_a_missing_module_is_pythons_own_error():
    """An import that fails says so in Python's words, under a stand-in too."""
    for text in ("import numpy.nothing", "import not_a_module_of_anyone", "from numpy import nothing"):
        with pytest.raises(ImportError):
            module_of(text, "float16")


def test_what_the_module_raises_comes_through():
    """An error of the user's module is not dressed up."""
    with pytest.raises(ZeroDivisionError):
        module_of("1 / 0", "float16")


def test_private_copy_owns_draws():
    """Under an arithmetic the carrier itself is wrapped, not copied; in plain NumPy the array is handed on."""
    setting = new_setting(arithmetic_named("float16"))
    carrier = setting.arithmetic.cast(DRAWS)
    own = PrivateCopy(len, setting).own(carrier)
    assert type(own) is Array
    assert own._carrier is carrier
    assert PrivateCopy(len, None).own(DRAWS) is DRAWS


@pytest.mark.parametrize("place", ["users", "others"])
def test_buffers_of_a_class_of_the_users_module(place):
    """They are the copy's own; a class of another module keeps plain NumPy, and its buffers refuse the state."""
    text = """
        import numpy as np
        class Buffer:
            def keep(self, x):
                made = np.zeros(3)
                made[:] = x
                return made
    """
    users = ModuleType("users")
    module = users if place == "users" else ModuleType("others")
    exec(compile(textwrap.dedent(text), "elsewhere.py", "exec", dont_inherit=True), module.__dict__)
    users.Buffer = module.Buffer
    code = "def kernel(x):\n    return Buffer().keep(x * 0.3)\n"
    exec(compile(code, FILE, "exec", dont_inherit=True), users.__dict__)
    setting = new_setting(arithmetic_named("float16"))
    made, x = copy_function(users.kernel, setting), owned(DRAWS, setting)
    if module is users:
        assert unheld(made(x), setting) == []
        return
    with pytest.raises(EscapeError, match=f"^{FILE}:2: a function or a plain array"):
        made(x)
