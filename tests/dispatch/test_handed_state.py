"""What a function handed over from Python keeps in its own module: each copy has its own, the user's is untouched."""

from __future__ import annotations

import array
import collections
import functools
import itertools
import sys
import textwrap
import threading
import weakref
from types import (
    BuiltinMethodType,
    CellType,
    FunctionType,
    MappingProxyType,
    MemberDescriptorType,
    MethodType,
    MethodWrapperType,
    ModuleType,
)

import numpy as np
import pytest
from handed_state import KINDS, LIBRARY, text_of
from kernel_runs import owned, same, unheld
from private_packages import sources_of, written

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import copy_function, new_setting
from narrowgauge.dispatch.importing import Copies
from narrowgauge.errors import KernelError, RefusedError

DRAWS = np.array([0.2, 1.4, 0.75])
FILE = "nowhere/kernel.py"


@pytest.fixture
def library(tmp_path, monkeypatch):
    """A module of a library, imported for real."""
    written(tmp_path / "apart", {"apart_kept.py": LIBRARY})
    monkeypatch.syspath_prepend(tmp_path / "apart")
    yield tmp_path
    sys.modules.pop("apart_kept", None)


def user_module(text, name="apart_user"):
    module = ModuleType(name)
    exec(compile(textwrap.dedent(text), FILE, "exec", dont_inherit=True), module.__dict__)
    return module


def content(value, known=None):  # noqa: PLR0912  # one branch for each kind of object
    """All that a value holds, as text: what no run of a copy may change."""
    known = {} if known is None else known
    if isinstance(value, (str, int, float, type(None), ModuleType)) and not hasattr(value, "__dict__"):
        return repr(value)
    if id(value) in known or (isinstance(value, type) and value.__module__ != "apart_user"):
        return known.get(id(value), getattr(value, "__name__", ""))
    known[id(value)] = f"#{len(known)}"
    parts = []
    if isinstance(value, functools._lru_cache_wrapper):
        parts.append(value.cache_info())
    elif isinstance(value, (dict, MappingProxyType, weakref.WeakKeyDictionary)):
        parts += [content(part, known) for item in value.items() for part in item]
    elif isinstance(value, (list, tuple, set, frozenset, collections.deque, array.array)):
        parts += [content(item, known) for item in value]
    elif isinstance(value, np.ndarray):
        parts += [content(item, known) for item in value.tolist()]
    elif isinstance(value, FunctionType):
        held = [value.__defaults__, value.__kwdefaults__, *(value.__closure__ or ())]
        parts += [content(part, known) for part in held]
    elif isinstance(value, CellType):
        parts.append(content(value.cell_contents, known))
    elif isinstance(value, (BuiltinMethodType, MethodType, MethodWrapperType)):
        parts.append(content(value.__self__, known))
    elif hasattr(value, "__length_hint__") or isinstance(value, itertools.count):
        parts.append(value.__reduce__()[1:])
    for base in type(value).__mro__:
        slots = [one for one in vars(base).values() if isinstance(one, MemberDescriptorType)]
        if "__slots__" in vars(base):
            parts += [content(slot.__get__(value), known) for slot in slots if slot.__name__ != "c"]
    for name, item in getattr(value, "__dict__", {}).items():
        if name not in ("__dict__", "__weakref__", "_abc_impl", "__slots__"):
            parts.append((name, content(item, known)))
    return f"{type(value).__name__}{parts}"


def state(module):
    kept = {name: value for name, value in vars(module).items() if not name.startswith("__")}
    return {name: content(value) for name, value in kept.items() if not isinstance(value, ModuleType)}


@pytest.mark.parametrize("form", ["float64", "float16", None])
@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_of_state_is_the_copys_own(library, kind, form):
    """Plain NumPy's and the user's own results agree bit for bit with float64's, narrower ones are rounded, a second
    copy starts afresh, and nothing of the user's has changed.
    """
    module, other = user_module(text_of(kind)), user_module(text_of(kind))
    before = state(module)
    results = []
    for _ in range(2):
        setting = None if form is None else new_setting(arithmetic_named(form))
        results.append(copy_function(module.kernel, setting)(owned(DRAWS, setting)))
        assert setting is None or setting.faults == []
        assert setting is None or unheld(results[-1], setting) == []
    assert state(module) == before
    agrees = same(other.kernel(DRAWS.copy()), results[-1])
    assert agrees or form == "float16"
    assert not agrees or form != "float16" or kind == "type itself"
    if form is None:
        assert same(results[0], results[1])


def test_the_state_of_a_run_is_seen_by_the_watch(library):
    """The negative control: the same module called by itself has changed, whatever the kind of its state."""
    idle = {"an lru_cache that calls itself", "type itself", "singledispatchmethod", "text that is executed"}
    for kind in KINDS.keys() - idle:
        module = user_module(text_of(kind))
        before = state(module)
        module.kernel(DRAWS.copy())
        if state(module) == before:
            idle.add(kind)
    assert len(idle) <= 8, idle


def test_a_cache_filled_by_plain_numpy_serves_no_format(library):
    """The rounded result is that of the same function without a cache."""
    text = """
        import functools
        def poly(k): return ((k * 0.3 + 0.1) * k - 0.7) * k + 0.113
        memo = functools.lru_cache(maxsize=None)(poly)
        def kernel(x): return memo(x[0])
        def bare(x): return poly(x[0])
    """
    module = user_module(text)
    module.kernel(DRAWS)
    filled = module.memo.cache_info()
    for form in (None, "float16", "bfloat16"):
        setting = None if form is None else new_setting(arithmetic_named(form))
        x = owned(DRAWS, setting)
        assert copy_function(module.kernel, setting)(x) == copy_function(module.bare, setting)(x)
    assert module.memo.cache_info() == filled


def test_what_cannot_be_copied_is_refused_by_name(library):
    """The path to it, what it is, why, and what is accepted."""
    text = """
        import sys, threading
        OPEN = (n for n in "abc")
        LOCAL = threading.local()
        HELD = {"k": [LOCAL]}
        class Odd(type): pass
        class Own:
            def __init__(self): self.open = (n for n in "a")
        MADE = Own()
        ME = sys.modules.get("apart_user")
        def one(x): return next(OPEN)
        def two(x): return HELD["k"]
        def three(x): return MADE
        def four(x): return ME
        def five(x):
            import apart_user
        def six(x): return FROM
        def free(x): return x.OPEN
    """
    module = ModuleType("apart_user")
    sys.modules["apart_user"] = module
    try:
        exec(compile(textwrap.dedent(text), FILE, "exec"), vars(module))
        module.FROM = np.frompyfunc(module.one, 1, 1)
        accepted = 'Accepted: "apart_user" in kernel.modules, which executes it anew; or make it inside the kernel'
        each, pickle = "cannot be copied for each format", "TypeError: cannot pickle"
        reasons = {
            "one": f"OPEN: generator <genexpr> {each}: {pickle}",
            "two": f"HELD: a _local {each}: {pickle}",
            "three": f"MADE: generator <genexpr> {each}: {pickle}",
            "four": f"ME: module apart_user {each}: the function reaches its own module as a whole",
            "six": f"FROM: ufunc one (vectorized) {each}: the function inside it cannot be exchanged",
        }
        for name, reason in reasons.items():
            with pytest.raises(KernelError) as raised:
                copy_function(getattr(module, name), None)
            assert str(raised.value).startswith(f"apart_user.{name}.{reason}")
            assert str(raised.value).endswith(accepted)
        setting = new_setting(arithmetic_named("float16"))
        words = "16: the kernel imports apart_user, the module of the function that was handed over without it"
        with pytest.raises(RefusedError, match=words):
            copy_function(module.five, setting)(1)
        assert copy_function(module.free, None) is not module.free
    finally:
        del sys.modules["apart_user"]


def test_functions_of_a_notebook_are_told_to_move():
    """`__main__` cannot be listed."""
    module = user_module("OPEN = (n for n in 'a')\ndef kernel(x): return OPEN\n", "__main__")
    with pytest.raises(KernelError, match=r"Accepted: its module, moved into a file, in kernel\.modules"):
        copy_function(module.kernel, None)


def test_locks_and_files_are_shared(library, tmp_path):
    """They hold nothing that a run could read."""
    text = "import sys, threading\nLOCK, OUT = threading.Lock(), sys.stderr\ndef kernel(x): return LOCK, OUT\n"
    module = user_module(text)
    assert copy_function(module.kernel, None)(1) == (module.LOCK, module.OUT)
    assert isinstance(module.LOCK, type(threading.Lock()))


def test_functions_made_inside_a_listed_module_are_rounded(library):
    """A closure of a listed module gets the globals of its copy, and its cache is the copy's own."""
    text = """
        import functools
        import numpy as np
        def make(rate):
            class Own:
                held = []
            @functools.lru_cache
            def step(v):
                Own.held.append(v)
                buffer = np.zeros(3)
                buffer[:] = v * rate
                return buffer
            return step, Own
    """
    written(library / "apart", {"apart_made.py": text})
    import apart_made

    try:
        step, own = apart_made.make(0.3)

        def kernel(x):
            return step(x[0])

        setting = new_setting(arithmetic_named("float16"))
        copies = Copies(setting, sources_of(library / "apart", ["apart_made"]))
        result = copy_function(kernel, setting, copies)(owned(DRAWS, setting))
        assert unheld(result, setting) == []
        assert step.cache_info().currsize == len(own.held) == 0
    finally:
        del sys.modules["apart_made"]
