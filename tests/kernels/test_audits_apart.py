"""Whole audits leave the user's modules as they were, and two at once do not mix."""

from __future__ import annotations

import copy
import importlib
import json
import sys
import textwrap
import threading
from pathlib import Path
from types import FunctionType, ModuleType
from typing import Any

import numpy as np
import pytest

from narrowgauge.api import audit
from narrowgauge.errors import KernelError, RefusedError

USERS = """
    import functools
    import numpy as np
    RATE, TABLE, SEEN, CACHE = 0.3, np.linspace(0.1, 0.9, 9), [], {"a": [1]}
    RNG = np.random.default_rng(3)
    draw = np.random.RandomState(4).normal
    COUNT = 0
    @functools.lru_cache(maxsize=None)
    def cached(n):
        return np.full(1, n / 3)
    def counter():
        n = 0
        def count():
            nonlocal n
            n += 1
            return n
        return count
    count = counter()
    class Model:
        calls, history = 0, []
        def step(self, x, dw):
            Model.calls += 1
            Model.history.append(x)
            return x + RATE * x * dw
    MODEL = Model()
    def kernel(rng, h, seen=[], *, steps, paths, how="ends", table={"calls": 0}):
        global COUNT
        COUNT += 1
        x = np.ones(paths) * cached(3)
        for i in range(steps):
            z = (rng.normal, RNG.normal, draw, np.random.normal)[i % 4](size=paths)
            x = MODEL.step(x, np.sqrt(h) * z)
        seen.append(x)
        SEEN.append(count())
        table["calls"] += 1
        CACHE["a"].append(x)
        CACHE[COUNT] = x
        if how == "raises" or (how == "narrow" and 1e-9 * x[0] == 0.0):
            raise ZeroDivisionError("told to")
        SEEN.clear()
        return x + TABLE[0]
    kernel.calls = CACHE
    def stepped(dW, h, seen=[], *, how):
        global COUNT
        COUNT += 1
        SEEN.append(count())
        seen.append(dW)
        CACHE["a"].append(COUNT)
        TABLE[0] = COUNT
        kernel.calls[COUNT] = h
        return dW.sum(axis=0) * RATE
    normal = np.random.normal
    def noisy(dW, h, *, how):
        return dW.sum(axis=0) + RNG.normal(size=dW.shape[1]) + draw() + normal()
"""
TOOLS = {"narrowgauge", "hypothesis", "pytest", "_pytest", "pluggy", "coverage"}  # they count and time all the while
SIZE = {"block": 1024, "paths": 1024, "most_paths": 1024}


@pytest.fixture
def users(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Any:
    """A user's module, imported for real; forgotten afterwards."""
    monkeypatch.syspath_prepend(tmp_path)
    (tmp_path / "users_library.py").write_text(textwrap.dedent(USERS), encoding="utf-8")
    yield importlib.import_module("users_library")
    del sys.modules["users_library"]


def asked(run: Any, how: str = "ends", **kernel: Any) -> dict[str, Any]:
    """A small audit as a mapping."""
    parameters = {"parameters": {"how": how}}
    return {
        "kernel": {"run": run, "takes": "rng", **kernel},
        "ladder": {"horizon": 1.0, "finest": 1},
        "formats": {"narrow": ["float16"], "wide": ["float32", "float64"]},
        "sampling": SIZE,
        **parameters,
    }


def tables() -> dict[str, tuple[ModuleType, dict[str, int]]]:
    """Every module of Python's table, this program and the test tools apart, with what it holds, by identity."""
    return {
        name: (module, {key: id(value) for key, value in vars(module).items()})
        for name, module in list(sys.modules.items())
        if isinstance(module, ModuleType) and name.partition(".")[0] not in TOOLS
    }


def insides(module: Any) -> Any:
    """What the functions, classes and containers of the user's module hold, by identity and by content."""
    functions = {
        name: (
            id(f.__code__), id(f.__globals__), id(f.__defaults__), id(f.__kwdefaults__), copy.deepcopy(f.__defaults__),
            copy.deepcopy(f.__kwdefaults__), [id(cell) for cell in f.__closure__ or ()],
            [id(cell.cell_contents) for cell in f.__closure__ or ()], {key: id(v) for key, v in vars(f).items()},
        )
        for name, f in vars(module).items() if isinstance(f, FunctionType)
    }  # fmt: skip
    model = {key: id(value) for key, value in vars(module.Model).items()}
    contents = copy.deepcopy((module.CACHE, module.SEEN, module.COUNT, module.TABLE.tolist(), module.Model.history))
    return functions, model, contents, module.cached.cache_info(), vars(module.MODEL), module.RNG.bit_generator.state


@pytest.mark.parametrize("handed", [True, False], ids=["function", "module"])
@pytest.mark.parametrize("how", ["ends", "raises", "narrow"])
def test_an_audit_leaves_every_module_as_it_was(users: Any, how: str, handed: bool) -> None:
    """Dictionaries of all modules, Python's table, caches, closures, defaults, classes and NumPy's global state.

    The kernel ends, raises in the reference, or raises in float16 alone, where 1e-9 is nothing. It is handed over as a
    function, or named by its module.
    """
    run = users.kernel if handed else "users_library:kernel"
    source = asked(run, how, modules=["users_library"])
    (warm := asked(run, modules=["users_library"]))["ladder"]["finest"] = 0
    audit(warm, quiet=True)  # what the first audit of a process imports
    before, held, state = tables(), insides(users), np.random.get_state()[1].tolist()  # noqa: NPY002  # must not move
    path = sys.path, list(sys.path)
    if how == "raises":
        with pytest.raises(KernelError, match="told to"):
            audit(source, quiet=True)
    else:
        record = audit(source, quiet=True).record
        raised = record.quantities["value"].levels[0].arms["float16"].raised
        assert (raised is not None) == (how == "narrow")
    after = tables()
    assert after.keys() == before.keys()
    for name, (module, names) in before.items():
        assert after[name] == (module, names), name
    assert insides(users) == held
    assert (sys.path, list(sys.path)) == path
    assert np.random.get_state()[1].tolist() == state  # noqa: NPY002


@pytest.mark.parametrize("name", ["stepped", "noisy"])
def test_a_function_of_increments_leaves_its_own_module_as_it_was(users: Any, name: str) -> None:
    """Neither listed nor imported: plain NumPy's run is of a copy too, also one that draws and is refused for it."""
    source = asked(getattr(users, name))
    source["kernel"]["takes"] = "increments"
    before, held, state = tables(), insides(users), np.random.get_state()[1].tolist()  # noqa: NPY002  # must not move
    if name == "noisy":
        with pytest.raises((KernelError, RefusedError)):
            audit(source, quiet=True)
    else:
        audit(source, quiet=True)
    assert tables()["users_library"] == before["users_library"]
    assert insides(users) == held
    assert np.random.get_state()[1].tolist() == state  # noqa: NPY002


def test_a_change_would_be_noticed(users: Any) -> None:
    """Negative control: the kernel called as it is changes what the test above looks at."""
    held = insides(users)
    users.kernel(np.random.default_rng(1), 0.5, steps=4, paths=3)
    changed = [one != other for one, other in zip(insides(users), held, strict=True)]
    assert changed == [True, True, True, True, False, True]


def figures(result: Any) -> Any:
    """The record of an audit without where and when it was made."""
    found = json.loads(json.dumps(result.record.document()))
    del found["provenance"]
    return found


def test_two_audits_at_once_do_not_mix(users: Any) -> None:
    """Each of several threads gets the record that it gets alone, with the same module and with others in between."""
    other = asked("users_library:kernel")
    other["formats"] = {"narrow": ["bfloat16"], "wide": ["float64"]}
    sources = [asked("users_library:kernel"), other, asked("users_library:kernel")]
    alone = [figures(audit(source, quiet=True)) for source in sources]
    assert alone[0] == alone[2] != alone[1]
    found: dict[int, Any] = {}
    start = threading.Barrier(len(sources))

    def work(place: int) -> None:
        start.wait()
        found[place] = figures(audit(sources[place], quiet=True))

    threads = [threading.Thread(target=work, args=(place,)) for place in range(len(sources))]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert [found[place] for place in range(len(sources))] == alone
