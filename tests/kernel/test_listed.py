"""Modules that an audit file lists: found where they lie, and every refusal word for word."""

from __future__ import annotations

import codecs
import importlib.machinery
import sys
import textwrap
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.errors import AuditFileError, KernelError
from narrowgauge.kernel.auditfile import audit_file_from, read_audit_file
from narrowgauge.kernel.contract import evaluate
from narrowgauge.kernel.loading import KernelSource, find_kernel, private_copy

SUFFIX = importlib.machinery.EXTENSION_SUFFIXES[0]
ONCE = "else list it under kernel.shared, where it is not rounded"


def found(
    folder: Path,
    files: dict[str, str],
    modules: list[str],
    shared: list[str] | None = None,
    run: str = "kernel.py:value",
) -> KernelSource:
    """Write the files, and find the kernel of an audit file that lists modules."""
    for name, text in files.items():
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_text(textwrap.dedent(text))
    path = folder / "audit.toml"
    path.write_text(
        f'[kernel]\nrun = "{run}"\ntakes = "normals"\nmodules = {modules}\nshared = {shared or []}\n'
        "[ladder]\nhorizon = 1.0\nfinest = 2\n"
    )
    return find_kernel(read_audit_file(path))


def result(kernel: KernelSource, name: str | None = None) -> list[float]:
    """Run a kernel on the draws 1/3, 0 and -2, in one step; what it returned as its only quantity."""
    copy = private_copy(kernel, None if name is None else arithmetic_named(name))
    draws = np.array([1 / 3, 0.0, -2.0]).reshape(1, 1, 3)
    carrier = draws if name is None else arithmetic_named(name).cast(draws)
    (values,) = evaluate(copy, carrier, 1.0, {}, "steps, paths").values()
    listed: list[float] = values.tolist()
    return listed


THIRD = float(np.float16(1 / 3))
EXPECTED = [float(np.float16(3 * THIRD)), 0.0, 6.0]
KERNEL = "from helper import scaled\ndef value(z, h):\n    return scaled(z[0])\n"
HELPER = "import numpy as np\ndef scaled(x):\n    v = np.zeros(x.shape)\n    v[:] = np.abs(x) * 3.0\n    return v\n"


def test_a_module_beside_the_kernel(tmp_path: Path) -> None:
    """It is found in the folder of the kernel's file, before Python's path, and rounded; Python's tables stay."""
    codecs.lookup("utf-8-sig")  # what reading an audit file brings in by itself
    before = dict(sys.modules), sys.path, list(sys.path)
    kernel = found(
        tmp_path, {"models/kernel.py": KERNEL, "models/helper.py": HELPER}, ["helper"], run="models/kernel.py:value"
    )
    assert result(kernel) == result(kernel, "float64") == [1.0, 0.0, 6.0]
    assert result(kernel, "float16") == EXPECTED
    assert (dict(sys.modules), sys.path, list(sys.path)) == before
    assert sys.path is before[1]


def test_a_kernel_by_its_file_inside_a_listed_package(tmp_path: Path) -> None:
    """It is a module of that package, whose relative imports work; a package beats a module of its name inside."""
    files = {"pkg/__init__.py": "", "pkg/kernel.py": KERNEL.replace("helper", ".helper"), "pkg/helper.py": HELPER}
    kernel = found(tmp_path, files, ["pkg"], run="pkg/kernel.py:value")
    assert kernel.module == "pkg.kernel"
    assert result(kernel, "float16") == EXPECTED
    dotted = found(tmp_path, {"pkg/pkg.py": "raise SystemExit(1)\n"}, ["pkg"], run="pkg.kernel:value")
    assert result(dotted, "float16") == EXPECTED


def test_modules_that_are_shared_are_known_to_the_copy(tmp_path: Path) -> None:
    """The names of shared modules that were met are an attribute of the private copy."""
    files = {
        "kernel.py": KERNEL.replace("helper", "shared_helper"),
        "shared_helper.py": "def scaled(x): return abs(x) * 3.0\n",
    }
    kernel = found(tmp_path, files, [], ["shared_helper"])
    try:
        assert private_copy(kernel, None).shared == ("shared_helper",)
        assert result(kernel, "float16") == EXPECTED
    finally:
        del sys.modules["shared_helper"]


def refused(folder: Path, files: dict[str, str], modules: list[str], shared: list[str] | None = None) -> str:
    """The message about an audit file whose modules are not accepted, without its name."""
    with pytest.raises(AuditFileError) as caught:
        found(folder, files, modules, shared)
    assert caught.value.__context__ is None or caught.value.__suppress_context__  # one message, not two
    return str(caught.value).removeprefix(f"{folder / 'audit.toml'}: ")


def test_what_can_be_told_without_executing(tmp_path: Path) -> None:
    """Modules that are not there, are the audit's own, have a stand-in, have no source, or are not Python."""
    kernel = {"kernel.py": KERNEL}
    nowhere = "no Python module 'nowhere'; accepted: a module beside the kernel, or an importable one"
    assert refused(tmp_path, kernel, ["nowhere"]) == f"kernel.modules: {nowhere}"
    assert refused(tmp_path, kernel, [], ["nowhere"]) == f"kernel.shared: {nowhere}"
    for name in ("narrowgauge", "narrowgauge.errors", "narrowgauge.nowhere"):
        words = f"{name} is part of the audit itself; accepted: modules of the kernel's own"
        assert refused(tmp_path, kernel, [name]) == f"kernel.modules: {words}"
    for name in ("numpy.random", "scipy", "pickle"):
        words = f"{name} belongs to {name.split('.')[0]}, for which every copy has a stand-in"
        assert refused(tmp_path, kernel, [name]) == f"kernel.modules: {words}; accepted: modules of the kernel's own"
    fast = {"pkg/__init__.py": "", f"pkg/fast{SUFFIX}": ""}
    assert refused(tmp_path, {**kernel, **fast}, ["pkg.fast"]) == (
        f"kernel.modules: pkg.fast cannot be copied: it is compiled, without Python source "
        f"({tmp_path / 'pkg' / f'fast{SUFFIX}'}); accepted: a module that can be executed twice; {ONCE}"
    )
    assert refused(tmp_path, kernel, ["_struct"]).startswith("kernel.modules: _struct cannot be copied: it is compiled")
    assert refused(tmp_path, {**kernel, "helper.py": "def f(:\n"}, ["helper"]) == (
        f"kernel.modules: {tmp_path.resolve() / 'helper.py'}:1 is not Python: invalid syntax; accepted: a Python file"
    )


def test_a_module_of_the_standard_library_may_be_listed(tmp_path: Path) -> None:
    """It is copied like any other one, and its arithmetic rounded; one that registers itself is refused."""
    text = "import colorsys\nimport numpy as np\ndef value(z, h):\n    return np.array([{call} for x in z[0]])\n"
    call = "colorsys.rgb_to_yiq(x, x, x)[0]"  # 0.30 r + 0.59 g + 0.11 b, which the library writes in that order
    kernel = found(tmp_path, {"kernel.py": text.format(call=call)}, ["colorsys"])
    half = np.float16
    expected = [half(half(0.3) * x) + half(half(0.59) * x) + half(half(0.11) * x) for x in half([1 / 3, 0.0, -2.0])]
    assert result(kernel, "float16") == [float(x) for x in expected]
    kernel = found(tmp_path, {"kernel.py": "import os\ndef value(z, h):\n    return z[0]\n"}, ["os"])
    with pytest.raises(
        AuditFileError, match=r"kernel\.modules: os cannot be copied: it changes sys\.modules\['os\.path'\]"
    ):
        private_copy(kernel, arithmetic_named("float16"))


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("import sys\nME = sys.modules[__name__]\n", "it is looked up in sys.modules, where no copy is"),
        ("import sys\nsys.modules[__name__] = 3\n", "it changes sys.modules['helper']"),
        (
            "try:\n    from pkg import fast\nexcept Exception:\n    pass\n",
            f"it is compiled, without Python source (FOLDER/pkg/fast{SUFFIX})",
        ),
        ("raise ValueError('registered already')\n", "executing it anew raised ValueError: registered already"),
        ("import nowhere_at_all\n", "executing it anew raised ModuleNotFoundError: No module named 'nowhere_at_all'"),
    ],
)
def test_what_shows_when_it_is_executed(tmp_path: Path, text: str, reason: str) -> None:
    """The error is the audit file's, in plain NumPy and in an arithmetic, also where the module swallowed it."""
    files = {"kernel.py": "import helper\n", "helper.py": text, "pkg/__init__.py": "", f"pkg/fast{SUFFIX}": ""}
    kernel = found(tmp_path, files, ["helper", "pkg"])
    name = "pkg.fast" if "fast" in text else "helper"
    for arithmetic in (None, arithmetic_named("float16")):
        with pytest.raises(AuditFileError) as caught:
            private_copy(kernel, arithmetic)
        assert str(caught.value) == (
            f"{tmp_path / 'audit.toml'}: kernel.modules: {name} cannot be copied: "
            f"{reason.replace('FOLDER', str(tmp_path))}; accepted: a module that can be executed twice; {ONCE}"
        )


def test_a_kernel_that_cannot_be_copied_itself(tmp_path: Path) -> None:
    """Its own module is no listed one, so that the error is about kernel.run."""
    text = "import sys\nME = sys.modules.get(__name__)\ndef value(z, h): return z[0]\n"
    kernel = found(tmp_path, {"kernel.py": text}, [])
    for arithmetic in (None, arithmetic_named("float16")):
        with pytest.raises(AuditFileError) as caught:
            private_copy(kernel, arithmetic)
        assert str(caught.value) == (
            f"{tmp_path / 'audit.toml'}: kernel.run: kernel cannot be copied: it is looked up in sys.modules, where no "
            "copy is; accepted: a module that can be executed twice"
        )


def test_what_a_listed_module_raises_is_not_what_the_kernel_raises(tmp_path: Path) -> None:
    """A kernel that gets over a module that is not there goes on; what it raises then is its own."""
    text = "try:\n    import helper\nexcept ImportError:\n    pass\n1 / 0\n"
    kernel = found(tmp_path, {"kernel.py": text, "helper.py": "import nowhere_at_all\n"}, ["helper"])
    with pytest.raises(KernelError) as caught:
        private_copy(kernel, None)
    assert str(caught.value) == "kernel.py:value: executing the module raised ZeroDivisionError: division by zero"


def test_a_swallowed_refusal_of_the_kernels_module_is_not_lost(tmp_path: Path) -> None:
    """What is refused while the module is executed fails the copy, though the kernel went on."""
    tried = "try:\n    np.random.default_rng().normal()\nexcept Exception:\n    pass\n"
    text = f"import numpy as np\n{tried}def value(z, h): return z[0]\n"
    kernel = found(tmp_path, {"kernel.py": text}, [])
    assert callable(private_copy(kernel, None).function)
    with pytest.raises(Exception, match=r"Generator\.normal draws while the module is executed, without a seed"):
        private_copy(kernel, arithmetic_named("float16"))


def test_a_function_handed_over_with_listed_modules(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Plain NumPy and an arithmetic each run a copy that meets copies of its modules, which stay as they are."""
    monkeypatch.syspath_prepend(tmp_path)
    (tmp_path / "listed_helper.py").write_text(HELPER)
    helper: Any = __import__("listed_helper")
    monkeypatch.delitem(sys.modules, "listed_helper")
    monkeypatch.setitem(sys.modules, "listed_helper", helper)

    def value(z: Any, h: float) -> Any:
        return helper.scaled(z[0])

    table = {"run": value, "takes": "normals", "modules": ["listed_helper"]}
    kernel = find_kernel(audit_file_from({"kernel": table, "ladder": {"horizon": 1.0, "finest": 2}}))
    before = dict(vars(helper))
    assert private_copy(kernel, None).function is not value
    assert result(kernel) == result(kernel, "float64") == [1.0, 0.0, 6.0]
    assert result(kernel, "float16") == EXPECTED
    assert dict(vars(helper)) == before
    assert value.__closure__[0].cell_contents is helper
