"""Private copies of listed modules and packages: every spelling and every way to import."""

from __future__ import annotations

import importlib
import sys

import numpy as np
import pytest
from kernel_runs import owned, same, unheld
from private_packages import DRAWS, PACKAGE, Watch, copied, run, written

from narrowgauge.dispatch.array import Array
from narrowgauge.errors import EscapeError, RefusedError

# A module that makes or reaches its arrays in the stated way; each defines f(x), of which the result must be rounded.
SPELLINGS = {
    "alias": "import numpy as xp\ndef f(x): return xp.zeros(3) + xp.exp(x * 0.3)",
    "star": "from numpy import *\ndef f(x): return zeros(3) + exp(x * 0.3)",
    "from": "from numpy import zeros as make, exp\ndef f(x): return make(3) + exp(x * 0.3)",
    "inside": "def f(x):\n    import numpy as np\n    from math import sqrt\n"
    "    v = np.empty(3)\n    v[:] = x * sqrt(x[0])\n    return v",
    "default": "import numpy as np\ndef f(x, *, make=np.ones, _exp=np.exp): return make(3) * 0.1 + _exp(x)",
    "closure": "import numpy as np\ndef outer(make):\n    def inner(x):\n        v = make(3)\n        v += x / 3\n"
    "        return v\n    return inner\nf = outer(np.zeros)",
    "table": "import numpy as np\nTABLE = {'make': np.zeros, 'parts': [np.exp]}\n"
    "def f(x):\n    v = TABLE['make'](3)\n    v[:] = TABLE['parts'][0](x)\n    return v",
    "buffer": "import numpy as np\nBUFFER = np.zeros((2, 3))\nWEIGHTS = np.array([0.1, 0.2, 0.3])\n"
    "def f(x):\n    BUFFER[1] = BUFFER[0] + WEIGHTS * x\n    return BUFFER[1] / 3",
    "attributes": "import numpy as np\nclass Model:\n    make = staticmethod(np.zeros)\n    shift = np.full(3, 0.1)\n"
    "    def step(self, x):\n        v = self.make(3)\n        v[:] = x\n        return v + self.shift\n"
    "def f(x): return Model().step(x)",
    "decorator": "import functools\nimport numpy as np\ndef into(make):\n    def decorate(g):\n"
    "        @functools.wraps(g)\n        def inner(x):\n            v = make(3)\n            v[:] = g(x)\n"
    "            return v\n        return inner\n    return decorate\n@into(np.zeros)\ndef f(x): return x * 0.3",
    "dataclass": "from __future__ import annotations\nfrom dataclasses import dataclass, field\nimport numpy as np\n"
    "@dataclass\nclass State:\n    x: np.ndarray = field(default_factory=lambda: np.zeros(3))\n"
    "    rate: float = 0.3\ndef f(x):\n    s = State()\n    s.x += s.rate * x\n    return s.x",
    "partial": "from functools import partial\nimport numpy as np\nmake = partial(np.full, 3, fill_value=0.1)\n"
    "def f(x):\n    v = make()\n    v *= x\n    return v",
    "property": "import numpy as np\nclass Grid:\n    def __init__(self, n): self.n = n\n    @property\n"
    "    def empty(self): return np.empty(self.n)\n    @classmethod\n    def of(cls, x): return cls(len(x)).empty\n"
    "def f(x):\n    v = Grid.of(x)\n    v[:] = np.sqrt(x)\n    return v * 0.1",
}  # fmt: skip


@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16", "float32"])
@pytest.mark.parametrize("spelling", SPELLINGS)
def test_every_spelling_in_a_listed_module_is_met(tmp_path, spelling, form):
    """float64 gives plain NumPy's bits, and in every format what comes out is wrapped and of the format."""
    written(tmp_path, {"helper.py": SPELLINGS[spelling], "kernel.py": "from helper import f as kernel\n"})
    plain, _ = run(tmp_path, None, ["helper"])  # a star import brings in what NumPy keeps for later
    watch = Watch()
    result, setting = run(tmp_path, form, ["helper"])
    assert setting.faults == []
    assert watch.unchanged()
    assert unheld(result, setting) == []
    assert isinstance(result, np.ndarray)
    assert type(result) is Array
    assert same(plain, result) == (form == "float64")


def test_a_spelling_in_a_module_that_is_not_copied_is_caught(tmp_path, monkeypatch):
    """The negative control: of the 13 spellings for real, each one that makes a buffer of its own is an escape."""
    escaped = 0
    for number, text in enumerate(SPELLINGS.values()):
        name = f"spelling_{number}"
        written(tmp_path, {f"apart/{name}.py": text, "kernel.py": f"from {name} import f as kernel\n"})
        monkeypatch.syspath_prepend(tmp_path / "apart")
        module, copies = copied(tmp_path, "float16")
        try:
            module.kernel(owned(DRAWS, copies.setting))
        except (EscapeError, RefusedError):
            escaped += 1
        monkeypatch.delitem(sys.modules, name)
    assert escaped >= 7  # the others return what NumPy's protocols had rounded


@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16", "float32"])
def test_a_package_lists_all_of_it(tmp_path, form):
    """Nested packages, relative and star imports, imports inside functions and circles get the same copies."""
    written(tmp_path, PACKAGE)
    watch = Watch()
    result, setting = run(tmp_path, form, ["pkg"])
    assert watch.unchanged()
    plain, _ = run(tmp_path, None, ["pkg"])
    assert unheld(result, setting) == []
    assert same(plain, result) == (form == "float64")
    assert setting.files == {str(tmp_path.resolve() / name) for name in PACKAGE}


def test_a_copy_of_a_package_does_what_python_makes_of_it(tmp_path, monkeypatch):
    """Imported for real, the same package gives the same bits, and the same modules under the same names."""
    written(tmp_path, PACKAGE)
    monkeypatch.syspath_prepend(tmp_path)
    before = set(sys.modules)
    try:
        real = importlib.import_module("kernel")
        names = {name for name in set(sys.modules) - before if name.partition(".")[0] in ("pkg", "kernel")}
        expected = real.kernel(DRAWS.copy())
    finally:
        for name in set(sys.modules) - before:
            del sys.modules[name]
    module, copies = copied(tmp_path, None, ["pkg"])
    assert same(expected, module.kernel(DRAWS.copy()))
    assert set(copies.modules) == names


def test_a_copy_has_the_attributes_of_a_module(tmp_path):
    """Name, package, file, path, spec and loader are those of Python's own import."""
    written(tmp_path, {**PACKAGE, "spaces/part.py": "HERE = __file__\n"})
    _, copies = copied(tmp_path, "float16", ["pkg", "spaces"])
    package, module, part = copies.load("pkg.tools"), copies.load("pkg.tools.deep"), copies.load("spaces.part")
    assert copies.load("pkg").NAMES == ["pkg", "pkg"]
    for copy, file in ((package, "tools/__init__.py"), (module, "tools/deep.py")):
        spec = copy.__spec__
        path = str(tmp_path.resolve() / "pkg" / file)
        assert (copy.__file__, spec.origin, spec.name) == (path, path, copy.__name__)
        assert copy.__loader__ is spec.loader
        assert copy.__package__ == "pkg.tools"
        assert spec.loader.get_source(copy.__name__).strip()
    assert package.__path__ == [str(tmp_path / "pkg" / "tools")]
    assert not hasattr(module, "__path__")
    assert copies.load("spaces").__path__ == [str(tmp_path / "spaces")]  # a package without __init__.py
    assert part.HERE == part.__file__


def test_import_module_and_resources_lead_to_copies(tmp_path):
    """importlib.import_module, full and relative, a lazy package and files beside a module work as ever."""
    written(
        tmp_path,
        {
            "kernel.py": """
                import importlib, importlib.resources
                from importlib import import_module
                from pathlib import Path
                import pkg
                part = importlib.import_module("pkg.part")
                def kernel(x):
                    assert importlib.import_module(".part", "pkg") is part is import_module("pkg.part") is pkg.part
                    text = importlib.resources.files("pkg").joinpath("data.txt").read_text()
                    assert text == importlib.resources.files(pkg).joinpath("data.txt").read_text()
                    assert text == Path(pkg.__file__).with_name("data.txt").read_text() == pkg.data()
                    assert import_module("json").dumps(float(text)) == "0.3"
                    return import_module("numpy").zeros(3) + part.f(x) * float(text), pkg.lazy.f(x)
            """,
            "pkg/__init__.py": """
                import importlib
                def __getattr__(name):
                    if name == "lazy":
                        return importlib.import_module(f".{name}", __name__)
                    raise AttributeError(name)
                def data():
                    from importlib.resources import files
                    return files(__package__).joinpath("data.txt").read_text()
            """,
            "pkg/part.py": "import numpy as np\ndef f(x): return np.exp(x) + np.ones(3)",
            "pkg/lazy.py": "import numpy as np\ndef f(x): return np.full(3, 0.1) * x",
            "pkg/data.txt": "0.3",
        },
    )
    assert run(tmp_path, None, ["pkg"])[1] is None  # brings in what Python itself needs to read resources
    watch = Watch()
    result, setting = run(tmp_path, "float16", ["pkg"])
    assert unheld(result, setting) == []
    assert watch.unchanged()


def test_classes_of_the_standard_library_work_in_a_copy(tmp_path):
    """Dataclasses, enumerations, typing and functools find what they need though sys.modules has no copy."""
    written(
        tmp_path,
        {
            "base.py": """
                from __future__ import annotations
                from dataclasses import dataclass
                Rate = float
                @dataclass(frozen=True)
                class Base:
                    rate: Rate = 0.3
            """,
            "kernel.py": """
                from __future__ import annotations
                import enum, functools, typing
                from abc import ABC, abstractmethod
                from collections import namedtuple
                from dataclasses import dataclass, fields, replace
                from base import Base
                Pair = namedtuple("Pair", "a b")
                class Kind(enum.Enum):
                    CALL = "call"
                Flag = enum.IntFlag("Flag", "A B")
                class Row(typing.NamedTuple):
                    a: int
                    b: Kind = Kind.CALL
                class Model(ABC):
                    @abstractmethod
                    def step(self, x): ...
                @dataclass(slots=True)
                class Euler(Model):
                    weight: float
                    def step(self, x):
                        return self.weight * x
                @dataclass(frozen=True)
                class Later(Base):
                    kind: Kind = Kind.CALL
                    shift: typing.ClassVar[int] = 3
                @functools.lru_cache(maxsize=None)
                def cached(n):
                    return n + 1
                @functools.singledispatch
                def shown(x): return "other"
                @shown.register
                def _(x: int): return "int"
                def kernel(x):
                    assert typing.get_type_hints(Later) == {
                        "rate": float, "kind": Kind, "shift": typing.ClassVar[int]}
                    assert typing.get_type_hints(kernel) == {}
                    assert [f.name for f in fields(Later)] == ["rate", "kind"]
                    assert (Row(1).b, Pair(1, 2).b, cached(1), shown(1), shown("")) == (Kind.CALL, 2, 2, "int", "other")
                    assert Flag.A | Flag.B and replace(Base(), rate=1).rate == 1
                    return Euler(0.3).step(x) * Base().rate
            """,
        },
    )
    for form in (None, "float16", "float64"):
        result, setting = run(tmp_path, form, ["base"])
        assert setting is None or unheld(result, setting) == []


def test_a_kernel_inside_a_package(tmp_path):
    """A kernel under its dotted name reaches listed modules around it; what is not listed is not executed."""
    written(
        tmp_path,
        {
            "pkg/__init__.py": "raise RuntimeError('executed')\n",
            "pkg/models/__init__.py": "raise RuntimeError('executed')\n",
            "pkg/models/kernel.py": """
                from . import near
                from ..tools import scale
                import pkg.tools as t
                def kernel(x):
                    return near.f(x) + scale(x) + t.scale(x)
            """,
            "pkg/models/near.py": "import numpy as np\ndef f(x): return np.ones(3) * x / 3",
            "pkg/models/other.py": "",
            "pkg/tools.py": "import numpy as np\ndef scale(x): return np.full(3, 0.3) * x",
        },
    )
    result, setting = run(tmp_path, "float16", ["pkg.models.near", "pkg.tools"], kernel="pkg.models.kernel")
    assert unheld(result, setting) == []
    beside = {"from . import other": (".", "pkg.models.other"), "from .other import f": (".other", "pkg.models.other"),
              "import pkg.models.other": ("pkg.models.other", "pkg.models.other"), "from pkg import x": ("pkg", "pkg"),
              "from .. import x": ("..", "pkg")}  # fmt: skip
    for statement, (spelled, listed) in beside.items():
        written(tmp_path, {"pkg/models/kernel.py": statement})
        with pytest.raises(RefusedError) as raised:
            copied(tmp_path, "float16", ["pkg.models.near"], kernel="pkg.models.kernel")
        place = tmp_path.resolve() / "pkg/models/kernel.py"
        assert str(raised.value) == (
            f"{place}:1: the kernel imports {spelled}, which lies beside it and is not listed: its NumPy would not be "
            f'rounded. Accepted: "{listed}" in kernel.modules, or in kernel.shared to run it as it is'
        )


def test_relative_imports_beside_a_kernel_that_is_named_by_its_file(tmp_path):
    """Its folder counts as a package without a name; beyond it Python's own error comes."""
    written(
        tmp_path,
        {
            "kernel.py": "from . import helper\nfrom .helper import f\ndef kernel(x): return helper.f(x) + f(x)\n",
            "helper.py": "import numpy as np\nfrom .other import g\ndef f(x): return g(np.zeros(3) + x)\n",
            "other.py": "def g(x): return x / 3\n",
        },
    )
    result, setting = run(tmp_path, "float16", ["helper", "other"])
    assert unheld(result, setting) == []
    written(tmp_path, {"kernel.py": "from .. import helper\n"})
    with pytest.raises(ImportError, match="attempted relative import beyond top-level package"):
        copied(tmp_path, "float16", ["helper"])


def test_a_missing_name_or_module_is_pythons_own_error(tmp_path):
    """`from package import nothing`, a submodule that is not there, and code that expects either."""
    written(tmp_path, {"pkg/__init__.py": "", "kernel.py": ""})
    for statement in ("from pkg import nothing", "import pkg.nothing", "from pkg.nothing import f", "import pkg.a.b"):
        written(tmp_path, {"kernel.py": statement})
        with pytest.raises(ImportError):
            copied(tmp_path, "float16", ["pkg"])
    written(tmp_path, {"kernel.py": "try:\n    import pkg.fast\nexcept ImportError:\n    FAST = False\n"})
    assert copied(tmp_path, "float16", ["pkg"])[0].FAST is False


def test_the_search_path_of_a_copy_is_its_own(tmp_path):
    """A kernel may extend sys.path; what lies there counts as beside it, and Python's own path stays."""
    written(tmp_path, {"kernel.py": "import sys\nsys.path.append(FOLDER)\nimport far_away\n", "far/far_away.py": ""})
    text = (tmp_path / "kernel.py").read_text().replace("FOLDER", repr(str(tmp_path / "far")))
    (tmp_path / "kernel.py").write_text(text)
    watch = Watch()
    with pytest.raises(RefusedError, match="the kernel imports far_away, which lies beside it and is not listed"):
        copied(tmp_path, "float16")
    assert watch.unchanged()
