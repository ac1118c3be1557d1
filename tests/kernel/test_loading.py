"""Kernels found and executed: files, modules, functions handed over, and every refusal word for word."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.errors import AuditFileError, KernelError, RefusedError
from narrowgauge.kernel.auditfile import AuditFile, audit_file_from, read_audit_file
from narrowgauge.kernel.contract import evaluate
from narrowgauge.kernel.loading import KernelSource, find_kernel, private_copy

NARROW = arithmetic_named("float16")
LATER = 1.0  # a global of the functions below, which a private copy has, too


def asked(folder: Path, run: str) -> AuditFile:
    """Return the audit file of a kernel that lies in `folder`."""
    path = folder / "audit.toml"
    path.write_text(f'[kernel]\nrun = "{run}"\ntakes = "normals"\n[ladder]\nhorizon = 1.0\nfinest = 2\n')
    return read_audit_file(path)


def handed(run: Any) -> AuditFile:
    return audit_file_from({"kernel": {"run": run, "takes": "normals"}, "ladder": {"horizon": 1.0, "finest": 2}})


def found(folder: Path, source: str | bytes, run: str = "kernel.py:value") -> KernelSource:
    data = source.encode() if isinstance(source, str) else source
    (folder / "kernel.py").write_bytes(data)
    return find_kernel(asked(folder, run))


def result(kernel: KernelSource, name: str | None = None) -> list[float]:
    """Run a kernel on the draws 1/3, 0 and -2, in one step; what it returned as its only quantity."""
    copy = private_copy(kernel, None if name is None else arithmetic_named(name))
    draws = np.array([1 / 3, 0.0, -2.0]).reshape(1, 1, 3)
    carrier = draws if name is None else arithmetic_named(name).cast(draws)
    (values,) = evaluate(copy, carrier, 1.0, {}, "steps, paths").values()
    listed: list[float] = values.tolist()
    return listed


def refused(audit_file: AuditFile) -> str:
    """The message about a kernel that is not found, without the name of the audit file."""
    with pytest.raises(AuditFileError) as caught:
        find_kernel(audit_file)
    assert caught.value.key == "kernel.run"
    assert caught.value.__context__ is None or caught.value.__suppress_context__  # one message, not two
    return str(caught.value).removeprefix(f"{audit_file.source}: ")


VALUE = "import numpy as np\n\ndef value(z, h):\n    return 3.0 * np.abs(z[0])\n"


def test_a_file_is_found_beside_its_audit_file_and_not_executed(tmp_path: Path) -> None:
    """Paths are relative to the audit file; code is compiled with the full path, and nothing of it runs."""
    kernel = found(tmp_path, "raise SystemExit(3)\n")
    assert (kernel.run, kernel.name, kernel.module, kernel.function) == ("kernel.py:value", "value", "kernel", None)
    assert kernel.source == str(tmp_path / "audit.toml")
    assert kernel.code is not None
    assert kernel.code.co_filename == str((tmp_path / "kernel.py").resolve())
    below = tmp_path / "models"
    below.mkdir()
    (below / "deep.py").write_text(VALUE)
    assert result(find_kernel(asked(tmp_path, "models/deep.py:value"))) == [1.0, 0.0, 6.0]
    assert result(find_kernel(asked(below, "../models/deep.py:value"))) == [1.0, 0.0, 6.0]


def test_a_kernel_runs_plain_and_in_an_arithmetic(tmp_path: Path) -> None:
    """Without an arithmetic the copy runs under plain NumPy, else each operation is rounded."""
    kernel = found(tmp_path, VALUE)
    assert result(kernel) == result(kernel, "float64") == [1.0, 0.0, 6.0]
    third = float(np.float16(1 / 3))
    assert 3 * third != float(np.float16(3 * third))
    assert result(kernel, "float16") == [float(np.float16(3 * third)), 0.0, 6.0]
    assert private_copy(kernel, None).setting is None


def test_every_copy_has_a_namespace_of_its_own(tmp_path: Path) -> None:
    """A module's state is not shared between copies, and sys.modules does not know any of them."""
    kernel = found(tmp_path, "calls = []\n\ndef value(z, h):\n    calls.append(1)\n    return z[0] + len(calls)\n")
    first, second = private_copy(kernel, None), private_copy(kernel, None)
    draws = np.zeros((1, 1, 2))
    seen = [evaluate(copy, draws, 1.0, {}, "steps, paths")["value"][0] for copy in (first, first, second)]
    assert seen == [1.0, 2.0, 1.0]
    assert "kernel" not in sys.modules


def test_a_module_is_found_without_importing_it(tmp_path: Path) -> None:
    """A dotted name is looked up beside the audit file, then on Python's path; packages above it do not run."""
    package = tmp_path / "plant"
    (package / "models").mkdir(parents=True)
    (package / "__init__.py").write_text("raise RuntimeError('imported')\n")
    (package / "models" / "deep.py").write_text(VALUE)  # a package without __init__.py
    kernel = find_kernel(asked(tmp_path, "plant.models.deep:value"))
    assert kernel.module == "plant.models.deep"
    assert result(kernel, "float64") == [1.0, 0.0, 6.0]
    whole = find_kernel(asked(tmp_path, "plant:value"))
    assert whole.code is not None
    assert whole.code.co_filename == str((package / "__init__.py").resolve())
    assert not [name for name in sys.modules if name.partition(".")[0] == "plant"]
    standard = find_kernel(asked(tmp_path, "colorsys:rgb_to_yiq"))
    assert standard.code is not None
    assert Path(standard.code.co_filename).name == "colorsys.py"


@pytest.mark.parametrize("name", ["nowhere", "plant.nowhere", "colorsys.value", "math", "nowhere.deep.er"])
def test_a_module_that_is_not_there(tmp_path: Path, name: str) -> None:
    """No module, none in a package, none below a module, and one that is not Python source."""
    (tmp_path / "plant").mkdir()
    (tmp_path / "plant" / "__init__.py").touch()
    accepted = "a file ending in .py, or an importable module"
    assert refused(asked(tmp_path, f"{name}:value")) == f"kernel.run: no Python module {name!r}; accepted: {accepted}"


def test_a_file_that_is_not_there(tmp_path: Path) -> None:
    """A missing file, and a folder with the name of one, by their path."""
    (tmp_path / "folder.py").mkdir()
    for name in ("missing.py", "folder.py"):
        assert refused(asked(tmp_path, f"{name}:value")) == (
            f"kernel.run: no such file: {tmp_path / name}; accepted: a Python file, relative to the audit file"
        )


def test_a_file_that_cannot_be_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The system's own words are passed on."""
    audit_file = asked(tmp_path, "kernel.py:value")
    path = (tmp_path / "kernel.py").resolve()
    path.touch()

    def fail(self: Path) -> bytes:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "read_bytes", fail)
    assert refused(audit_file) == f"kernel.run: cannot read {path}: Permission denied; accepted: a Python file"


def test_a_file_that_is_not_python(tmp_path: Path) -> None:
    """A syntax error is named with file and line; text that is not UTF-8 or holds a zero byte is one as well."""
    path = (tmp_path / "kernel.py").resolve()
    (tmp_path / "kernel.py").write_text("def value(z, h):\n    return z +\n")
    audit_file = asked(tmp_path, "kernel.py:value")
    assert refused(audit_file) == f"kernel.run: {path}:2 is not Python: invalid syntax; accepted: a Python file"
    for data in (b"x = '\xff'\n", b"x = 1\0\n"):  # their words differ between versions of Python
        path.write_bytes(data)
        message = refused(audit_file)
        assert message.startswith(f"kernel.run: {path}")
        assert " is not Python: " in message
        assert message.endswith("; accepted: a Python file")


@pytest.mark.parametrize(
    ("source", "known"),
    [
        ("from math import sqrt\ndef b(z, h): ...\ndef a(z, h): ...\nclass C: ...\n", "one of C, a, b"),
        ("value = 3.0\n", "a file that defines a function"),
        ("", "a file that defines a function"),
    ],
)
def test_a_function_that_is_not_there(tmp_path: Path, source: str, known: str) -> None:
    """The message lists what the module itself defines; a value that cannot be called is no function."""
    kernel = found(tmp_path, source)
    for arithmetic in (None, NARROW):
        with pytest.raises(AuditFileError) as caught:
            private_copy(kernel, arithmetic)
        place = f"{tmp_path / 'audit.toml'}: kernel.run: {(tmp_path / 'kernel.py').resolve()}"
        assert str(caught.value) == f"{place} has no function 'value'; accepted: {known}"


@pytest.mark.parametrize(
    ("source", "raised"),
    [
        ("1 / 0\n", "ZeroDivisionError: division by zero"),
        ("import nowhere_at_all\n", "ModuleNotFoundError: No module named 'nowhere_at_all'"),
        ("raise SystemExit(3)\n", "SystemExit: 3"),
    ],
)
def test_a_module_that_raises_when_it_is_executed(tmp_path: Path, source: str, raised: str) -> None:
    """The error names the kernel and what was raised, which is its cause."""
    kernel = found(tmp_path, source)
    for arithmetic in (None, NARROW):
        with pytest.raises(KernelError) as caught:
            private_copy(kernel, arithmetic)
        assert str(caught.value) == f"kernel.py:value: executing the module raised {raised}"
        assert type(caught.value.__cause__).__name__ == raised.partition(":")[0]


@pytest.mark.parametrize(
    ("statement", "name", "listed"),
    [
        ("import beside", "beside", "beside"),
        ("from beside import rate", "beside", "beside"),
        ("import package.inner", "package.inner", "package.inner"),
        ("from . import beside", ".beside", "beside"),
        ("from .beside import rate", ".beside", "beside"),
    ],
)
def test_a_module_that_imports_one_beside_it_is_refused(tmp_path: Path, statement: str, name: str, listed: str) -> None:
    """A sibling would not be rounded: refused under plain NumPy and in an arithmetic, there with file and line."""
    (tmp_path / "beside.py").write_text("rate = 0.1\n")
    (tmp_path / "package").mkdir()
    (tmp_path / "package" / "__init__.py").touch()
    kernel = found(tmp_path, f"import math\n{statement}\n{VALUE}")
    message = (
        f"the kernel imports {name}, which lies beside it and is not listed: its NumPy would not be rounded. "
        f'Accepted: "{listed}" in kernel.modules, or in kernel.shared to run it as it is'
    )
    with pytest.raises(KernelError) as plain:
        private_copy(kernel, None)
    assert str(plain.value) == message
    with pytest.raises(RefusedError) as rounded:
        private_copy(kernel, NARROW)
    assert str(rounded.value) == f"{(tmp_path / 'kernel.py').resolve()}:2: {message}"


def scaled(z: Any, h: float, factor: float = 3.0) -> Any:
    """A kernel that is handed over: default, global and NumPy of this module."""
    return np.abs(z[0]) * factor * LATER


def test_a_function_handed_over() -> None:
    """It has no file to compile; plain NumPy and an arithmetic each run a copy of it, so that nothing of it changes."""
    kernel = find_kernel(handed(scaled))
    assert (kernel.code, kernel.name, kernel.source) == (None, "scaled", "audit")
    assert kernel.run == f"{__name__}:scaled"
    assert kernel.function is scaled
    for arithmetic in (None, NARROW):
        made: Any = private_copy(kernel, arithmetic).function
        assert made is not scaled
        assert made.__globals__ is not scaled.__globals__
    assert result(kernel) == result(kernel, "float64") == [1.0, 0.0, 6.0]
    assert result(kernel, "float16") == [float(np.float16(3 * float(np.float16(1 / 3)))), 0.0, 6.0]


def test_a_function_of_a_local_scope_is_copied_with_its_cells() -> None:
    """A closure is rounded as well, and keeps what it closes over."""
    offset = 0.1

    def shifted(z: Any, h: float) -> Any:
        return np.abs(z[0]) + offset

    third, tenth = (np.float16(number) for number in (1 / 3, 0.1))
    assert result(find_kernel(handed(shifted)), "float16")[0] == float(third + tenth)
    assert result(find_kernel(handed(shifted)))[0] == 1 / 3 + 0.1
