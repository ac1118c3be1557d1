"""Private copies are apart from each other and from the user's own modules, also when something raises."""

from __future__ import annotations

import importlib
import sys
import threading

import numpy as np
import pytest
from kernel_runs import owned, unheld
from private_packages import DRAWS, PACKAGE, Watch, copied, run, written


def test_two_settings_in_two_threads_do_not_mix(tmp_path):
    """Each has its own copies, caches and buffers, also while both are importing and computing."""
    written(tmp_path, PACKAGE)
    start = threading.Barrier(2)
    results = {}

    def work(form):
        module, copies = copied(tmp_path, form, ["pkg"])
        start.wait()
        for _ in range(50):
            results.setdefault(form, []).append(module.kernel(owned(DRAWS, copies.setting)))
        results[form, "setting"] = copies.setting

    threads = [threading.Thread(target=work, args=(form,)) for form in ("float16", "bfloat16")]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    alone = {form: run(tmp_path, form, ["pkg"])[0] for form in ("float16", "bfloat16")}
    for form in ("float16", "bfloat16"):
        setting = results[form, "setting"]
        assert setting.faults == []
        for result in results[form]:
            assert unheld(result, setting) == []
            for one, other in zip(result, alone[form], strict=True):
                assert one._carrier.tobytes() == other._carrier.tobytes()
    assert not np.array_equal(alone["float16"][0]._carrier, alone["bfloat16"][0]._carrier)


KEPT = """
    import functools
    import numpy as np
    SEEN, TABLE, WEIGHTS = [], {"a": [1]}, np.ones(3)
    COUNT = 0
    @functools.lru_cache(maxsize=None)
    def cached(n):
        return np.full(3, n / 3)
    def counter():
        n = 0
        def count():
            nonlocal n
            n += 1
            return n
        return count
    count = counter()
    class Model:
        calls = 0
        history = []
    def f(x, seen=[], *, table={"calls": 0}):
        global COUNT
        COUNT += 1
        Model.calls += 1
        Model.history.append(x)
        seen.append(x)
        table["calls"] += 1
        TABLE["a"].append(x)
        SEEN.append(count())
        WEIGHTS[:] = x
        if RAISES:
            1 / 0
        return cached(1) * x
    RAISES = False
"""


def state(module):
    """Everything of a module that a copy could have changed, by identity and by value."""
    held = dict(vars(module))
    f = module.f
    values = (list(module.SEEN), module.TABLE["a"][:], module.WEIGHTS.tolist(), module.COUNT, module.Model.calls)
    more = (module.Model.history[:], f.__defaults__[0][:], dict(f.__kwdefaults__["table"]), module.cached.cache_info())
    cells = [cell.cell_contents for cell in module.count.__closure__]
    return held, (*values, *more, cells), (f.__code__, f.__defaults__, f.__kwdefaults__, dict(vars(np)))


@pytest.mark.parametrize("raises", [False, True])
def test_the_users_own_modules_stay_as_they_were(tmp_path, monkeypatch, raises):
    """With the real module imported: dictionaries, caches, closures and defaults are the same, also after an error."""
    monkeypatch.syspath_prepend(tmp_path)
    written(tmp_path, {"kept_users.py": KEPT, "kernel.py": "import kept_users\nkernel = kept_users.f\n"})
    if raises:
        text = (tmp_path / "kept_users.py").read_text()
        (tmp_path / "kept_users.py").write_text(text.replace("RAISES = False", "RAISES = True"))
    real = importlib.import_module("kept_users")
    monkeypatch.delitem(sys.modules, "kept_users")
    monkeypatch.setitem(sys.modules, "kept_users", real)
    before, watch = state(real), Watch()
    for form in ("float16", None):
        module, copies = copied(tmp_path, form, ["kept_users"])
        for _ in range(2):
            if raises:
                with pytest.raises(ZeroDivisionError):
                    module.kernel(owned(DRAWS, copies.setting))
            else:
                module.kernel(owned(DRAWS, copies.setting))
        assert module.kept_users is not real
        assert module.kept_users.SEEN == [1, 2]
    after = state(real)
    assert after == before
    assert all(after[0][name] is before[0][name] for name in before[0])
    assert watch.unchanged()


def test_a_module_that_raises_halfway_leaves_nothing_behind(tmp_path):
    """sys.modules, sys.path and the set of copies are as they were, and a second try executes the module again."""
    text = "import sys\nsys.path.insert(0, 'x')\nimport pkg.part\n1 / 0\n"
    written(tmp_path, {"kernel.py": "", "pkg/__init__.py": "", "pkg/part.py": "", "pkg/broken.py": text})
    _, copies = copied(tmp_path, "float16", ["pkg"])
    watch = Watch()
    for _ in range(2):
        with pytest.raises(ZeroDivisionError):
            copies.load("pkg.broken")
        assert watch.unchanged()
    assert set(copies.modules) == {"kernel", "pkg", "pkg.part"}
    assert not hasattr(copies.load("pkg"), "broken")
