"""Modules that cannot be copied, modules that are shared, and functions that were handed over beside listed modules."""

from __future__ import annotations

import importlib
import importlib.machinery
import sys
import threading

import numpy as np
import pytest
from kernel_runs import owned, same, unheld
from private_packages import DRAWS, Watch, copied, run, sources_of, written

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.copies import PrivateCopy, copy_function, new_setting
from narrowgauge.dispatch.importing import Copies
from narrowgauge.errors import EscapeError, KernelError, RefusedError

LOOKED_UP = "it is looked up in sys.modules, where no copy is"
# What a module does at import, and why it cannot be copied.
UNCOPIED = {
    "import sys\nME = sys.modules[__name__]": LOOKED_UP,
    "from sys import modules\nME = modules.get(__name__)": LOOKED_UP,
    "import sys\ntry:\n    ME = sys.modules[__name__]\nexcept Exception:\n    pass": LOOKED_UP,
    "import sys\nclass M: pass\nsys.modules[__name__] = M()": "it changes sys.modules['pkg.part']",
    "import sys\ndel sys.modules['json']": "it changes sys.modules['json']",
    "import sys\nsys.modules.setdefault('pkg_alias', 3)": "it changes sys.modules['pkg_alias']",
    # past the stand-in for sys: found by what has changed
    "import apart_registering as r\nr.register(__name__, type('M', (), {})())": "it changes sys.modules['pkg.part']",
    "import apart_registering as r\nr.register('json', 3)": "it changes sys.modules['json']",
    "import apart_registering as r\nimport pkg\nr.register('pkg_alias', pkg)": "it changes sys.modules['pkg_alias']",
}


@pytest.fixture
def apart(tmp_path, monkeypatch):
    """A folder on Python's path; what is imported from it is forgotten afterwards."""
    folder = tmp_path / "apart"
    text = "import sys\ndef register(name, value): sys.modules[name] = value\n"
    written(folder, {"apart_registering.py": text})
    monkeypatch.syspath_prepend(folder)
    before = set(sys.modules)
    yield folder
    for name in set(sys.modules) - before:
        if name.partition(".")[0].startswith("apart_"):
            del sys.modules[name]


@pytest.mark.parametrize("form", [None, "float16"])
@pytest.mark.parametrize("text", UNCOPIED)
def test_a_module_that_looks_itself_up_or_registers_itself_is_refused(tmp_path, apart, text, form):
    """It is named with the reason, Python's tables are restored, and a refusal that is swallowed is kept."""
    written(tmp_path, {"kernel.py": "import pkg.part\n", "pkg/__init__.py": "", "pkg/part.py": text})
    setting = None if form is None else new_setting(arithmetic_named(form))
    copies = Copies(setting, sources_of(tmp_path, ["pkg"]))
    watch = Watch()
    if "except" in text:
        copies.load("kernel")
    else:
        with pytest.raises(KernelError if form is None else RefusedError) as raised:
            copies.load("kernel")
        assert (
            f"pkg.part cannot be copied: {UNCOPIED[text]}. Accepted: list it under kernel.shared, "
            "where it is not rounded"
        ) in str(raised.value)
    assert copies.refused == ("pkg.part", UNCOPIED[text])
    assert watch.unchanged("apart_registering")
    assert setting is None or len(setting.faults) == 1


def test_other_entries_of_pythons_table_may_be_read(tmp_path):
    """sys.modules knows the real modules, and stand-ins where copies meet them; sys keeps all else."""
    text = """
        import sys
        def kernel(x):
            assert "json" in sys.modules and "kernel" not in sys.modules and len(sys.modules) > 10
            assert "json" in list(sys.modules) and sys.modules["json"].dumps(1) == "1"
            assert sys.modules.get("nowhere") is None and sys.version_info >= (3, 11)
            return sys.modules["numpy"].zeros(3) + x
    """
    written(tmp_path, {"kernel.py": text})
    result, setting = run(tmp_path, "float16")
    assert unheld(result, setting) == []


@pytest.mark.parametrize("form", [None, "float16"])
def test_a_compiled_module_is_refused(tmp_path, form):
    """A module without Python source cannot be executed anew, also where the kernel would do without it."""
    name = f"fast{importlib.machinery.EXTENSION_SUFFIXES[0]}"
    text = "try:\n    from . import fast\nexcept ImportError:\n    fast = None\n"
    written(tmp_path, {"kernel.py": "import pkg\n", "pkg/__init__.py": text, f"pkg/{name}": ""})
    copies = Copies(None if form is None else new_setting(arithmetic_named(form)), sources_of(tmp_path, ["pkg"]))
    with pytest.raises(KernelError if form is None else RefusedError):
        copies.load("kernel")
    assert copies.refused == ("pkg.fast", f"it is compiled, without Python source ({tmp_path / 'pkg' / name})")


def test_a_module_that_raises_is_known_by_name(tmp_path):
    """The innermost module whose execution raised, with the exception; one that was caught and got over is past."""
    files = {"kernel.py": "import outer\n", "outer.py": "import inner\n", "inner.py": "raise ValueError('twice')\n"}
    written(tmp_path, files)
    copies = Copies(None, sources_of(tmp_path, ["outer", "inner"]))
    with pytest.raises(ValueError, match="twice") as raised:
        copies.load("kernel")
    assert copies.failed == ("inner", raised.value)
    assert copies.refused is None


SHARED = {
    "kernel.py": """
        import pkg
        import pkg.registry
        from pkg import registry
        def kernel(x):
            from pkg.registry import RATE
            import beside
            assert pkg.registry is registry and beside.RATE == RATE
            return pkg.f(x) * RATE
    """,
    "pkg/__init__.py": "import numpy as np\nfrom .registry import RATE\ndef f(x): return np.zeros(3) + x / 3\n",
    "pkg/registry.py": "import sys\nME = sys.modules[__name__]\nRATE = ME.__dict__.setdefault('RATE', 0.3)\n",
    "beside.py": "RATE = 0.3\n",
}


def test_a_shared_module_is_imported_for_real_and_reported(tmp_path, monkeypatch):
    """It may look itself up, also beside the kernel and inside a copied package; it is reported once it is met."""
    monkeypatch.delitem(sys.modules, "beside", raising=False)
    written(tmp_path, SHARED)
    watch = Watch()
    module, copies = copied(tmp_path, "float16", ["pkg"], ["pkg.registry", "beside"])
    private = PrivateCopy(module.kernel, copies.setting, copies)
    try:
        assert private.shared == ("pkg.registry",)
        result = private.function(owned(DRAWS, copies.setting))
        assert private.shared == ("beside", "pkg.registry")
        assert module.registry is sys.modules["pkg.registry"]
        assert module.pkg is not sys.modules["pkg"]
    finally:
        for name in ("beside", "pkg", "pkg.registry"):
            sys.modules.pop(name, None)
    assert unheld(result, copies.setting) == []
    assert watch.unchanged()
    assert PrivateCopy(len, None).shared == PrivateCopy(len, None).compiled == ()


def test_a_shared_module_lets_nothing_escape(tmp_path, monkeypatch):
    """The state that is handed to a shared module keeps its rounding, or the escape is an error."""
    stores = "import numpy as np\ndef f(x):\n    v = np.zeros(3)\n    v[:] = x\n    return v\n"
    written(tmp_path, {"kernel.py": "import beside\ndef kernel(x): return beside.f(x)\n", "beside.py": stores})
    module, copies = copied(tmp_path, "float16", (), ["beside"])
    monkeypatch.setitem(sys.modules, "beside", sys.modules["beside"])
    try:
        with pytest.raises(EscapeError):
            module.kernel(owned(DRAWS, copies.setting))
    finally:
        monkeypatch.delitem(sys.modules, "beside")


HANDED = {
    "apart_model.py": """
        import enum
        from typing import NamedTuple
        import numpy as np
        from apart_tools import scale
        class Kind(enum.Enum):
            CALL = 1
        class Model:
            def __init__(self, rate):
                self.rate, self.kind, self.me, self.parts = rate, Kind.CALL, self, [np.full(3, 0.1)]
            def step(self, x):
                assert self.kind is Kind.CALL and self.me is self
                v = np.zeros(3)
                v[:] = scale(x) * self.rate + self.parts[0]
                return v
        class Slotted:
            __slots__ = ("rate",)
            def __init__(self):
                self.rate = 0.7
            def step(self, x):
                return np.full(3, self.rate) * x
        class Point(NamedTuple):
            rate: float
            step: object
        class Book(dict):
            def step(self, x):
                return np.full(3, self["rate"]) * x
        class Own(np.ndarray):
            pass
        def top(x, h):
            return Model(0.3).step(x)
    """,
    "apart_tools.py": "import numpy as np\ndef scale(x): return np.ones(3) * x / 3\n",
}


@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16", "float32"])
def test_a_function_handed_over_reaches_copies_of_listed_modules(apart, form):
    """Modules, functions, classes and objects of listed modules in globals, closure and defaults are exchanged."""
    written(apart, HANDED)
    model, tools = importlib.import_module("apart_model"), importlib.import_module("apart_tools")
    made, slotted, book = model.Model(0.3), model.Slotted(), model.Book(rate=0.3)
    book.extra = made
    point, own = model.Point(0.3, made.step), np.zeros(3).view(model.Own)

    def outer(step):
        def kernel(x, kind=model.Model, *, scale=tools.scale):
            from apart_tools import scale as again

            assert again is scale
            assert len(own) == 3
            assert isinstance(book.extra, kind)
            results = [step(x), kind(0.1).step(x), scale(x), made.step(x), slotted.step(x), tools.scale(x)]
            return [*results, model.top(x, 1), point.step(x) * point.rate, book.step(x)]

        return kernel

    kernel = outer(tools.scale)
    before, watch = (dict(vars(made)), slotted.rate, dict(vars(model)), dict(vars(tools))), Watch()
    setting = new_setting(arithmetic_named(form))
    copies = Copies(setting, sources_of(apart, ["apart_model", "apart_tools"]))
    result = copy_function(kernel, setting, copies)(owned(DRAWS, setting))
    assert unheld(result, setting) == []
    assert same(kernel(DRAWS.copy()), result) == (form == "float64")
    assert (dict(vars(made)), slotted.rate, dict(vars(model)), dict(vars(tools))) == before
    assert watch.unchanged()
    top = copy_function(model.top, setting, copies)
    assert top is copies.load("apart_model").top
    assert unheld(top(owned(DRAWS, setting), 1), setting) == []


def test_objects_of_modules_that_are_not_listed_stay_and_refuse_the_state(apart):
    """The negative control: the same function without the list escapes, with file and line."""
    written(apart, HANDED)
    made = importlib.import_module("apart_model").Model(0.3)

    def kernel(x):
        return made.step(x)

    setting = new_setting(arithmetic_named("float16"))
    with pytest.raises(EscapeError):
        copy_function(kernel, setting)(owned(DRAWS, setting))


def test_sources_are_read_and_compiled_once_for_all_copies(tmp_path):
    """Two settings execute the same code object; a change of the file in between is not seen by half of the arms."""
    written(tmp_path, {"kernel.py": "import helper\nkernel = helper.f\n", "helper.py": "def f(x): return x\n"})
    sources = sources_of(tmp_path, ["helper"])
    first = Copies(None, sources).load("helper")
    written(tmp_path, {"helper.py": "def f(x): return 2 * x\n"})
    second = Copies(new_setting(arithmetic_named("float16")), sources).load("helper")
    assert first.f.__code__ is second.f.__code__
    assert first is not second
    assert sources.texts()["helper"] == b"def f(x): return x\n"
    assert np.array_equal(second.f(DRAWS), DRAWS)


def test_imports_of_another_thread_are_not_a_modules_doing(tmp_path, apart):
    """A real import enters an odd name into sys.modules while another set of copies executes: neither is refused."""
    alias = "import sys, time\nsys.modules['apart_alias'] = 3\ntime.sleep(0.05)\n"
    written(apart, {"apart_odd.py": alias})
    written(tmp_path, {"one/kernel.py": "import apart_odd\n", "two/kernel.py": "import time\ntime.sleep(0.05)\n"})
    made = [Copies(None, sources_of(tmp_path / name)) for name in ("one", "two")]
    threads = [threading.Thread(target=copies.load, args=("kernel",)) for copies in made]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert [list(copies.modules) for copies in made] == [["kernel"], ["kernel"]]
    assert [copies.refused for copies in made] == [None, None]
    assert sys.modules["apart_alias"] == 3
