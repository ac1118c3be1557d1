"""Fingerprints: whatever is copied counts, and nothing that changes from run to run does."""

from __future__ import annotations

import functools
import hashlib
import subprocess
import sys
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np
import pytest

from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.auditfile import audit_file_from, read_audit_file
from narrowgauge.kernel.fingerprint import fingerprint
from narrowgauge.kernel.loading import KernelSource, find_kernel

BASE = """
import functools
import math
import numpy as np
RATE = 0.3
TABLE = {"a": [1, 2.5], "b": {"x", "y", "z"}}
WEIGHTS = np.array([0.1, 0.2])
half = functools.partial(pow, 2)
class Model:
    def step(self, x):
        return x * 0.3
def inner(x):
    return x + 1 if x in {"p", "q", "r"} else x
def outer(scale):
    def f(z, h, *, shift=0.1, names=("a", "b")):
        inner(z), RATE, TABLE, WEIGHTS, half, Model, math.sqrt, np
        return [scale * v for v in z]
    return f
f = outer(2.0)
"""
CHANGES = [
    ("RATE = 0.3", "RATE = 0.4"), ("[1, 2.5]", "[1, 2.75]"), ('"z"}', '"w"}'), ("[0.1, 0.2])", "[0.1, 0.25])"),
    ("pow, 2", "pow, 3"), ("x * 0.3", "x * 0.4"), ("x + 1", "x + 2"), ("x + 1", "x - 1"), ('"r"}', '"s"}'),
    ("shift=0.1", "shift=0.2"), ('("a", "b")', '("a", "c")'), ("outer(2.0)", "outer(3.0)"), ("outer(2.0)", "outer(2)"),
    ("scale * v", "v * scale"), ("math.sqrt, np", "math.cbrt, np"), ("import numpy as np", "import math as np"),
]  # fmt: skip


def function_of(text: str) -> Any:
    module = ModuleType("users")
    text = text.replace("import math as np", "import numpy as np, cmath as math")
    exec(compile(text, "users.py", "exec", dont_inherit=True), module.__dict__)
    return module.__dict__["f"]


@pytest.mark.parametrize(("old", "new"), CHANGES)
def test_everything_that_a_function_reaches_counts(old: str, new: str) -> None:
    """Its code and what it calls, defaults, closure, globals that it mentions; the same text gives the same again."""
    assert BASE.count(old) == 1
    assert fingerprint({}, function_of(BASE)) == fingerprint({}, function_of(BASE))
    assert fingerprint({}, function_of(BASE)) != fingerprint({}, function_of(BASE.replace(old, new)))


@pytest.mark.parametrize(
    ("old", "new"), [("f = outer", "UNUSED = 3\nf = outer"), ("import math", "import math  # again"), ("f(z", "f(z")]
)
def test_what_a_function_does_not_reach_does_not_count(old: str, new: str) -> None:
    """Comments, line numbers and globals that it never mentions."""
    assert fingerprint({}, function_of(BASE)) == fingerprint({}, function_of(BASE.replace(old, new)))


def test_a_fingerprint_is_the_same_in_every_process() -> None:
    """Sets of strings come in another order in each process, and objects lie elsewhere in memory."""
    code = (
        f"import sys\nfrom types import ModuleType\nfrom narrowgauge.kernel.fingerprint import fingerprint\n"
        f"names = {{'__name__': 'users'}}\nexec({BASE!r}, names)\nprint(fingerprint({{}}, names['f']))\n"
    )
    found = {
        subprocess.run(
            [sys.executable, "-c", code], check=True, capture_output=True, text=True, env={"PYTHONHASHSEED": seed}
        ).stdout.strip()
        for seed in ("1", "2", "3")
    }
    assert found == {fingerprint({}, function_of(BASE))}


def test_circles_and_other_objects() -> None:
    """A function that mentions itself, an empty cell, a list that holds itself; of other objects the type counts."""

    def unassigned(z: Any) -> Any:
        return later, unassigned, ring, thing, grid

    ring: list[Any] = []
    ring.append(ring)
    thing, grid = object(), np.array([0.1, None], dtype=object)
    first = fingerprint({}, unassigned)
    thing = object()
    assert fingerprint({}, unassigned) == first
    later = 1
    assert fingerprint({}, unassigned) != first
    assert fingerprint({}, functools.partial(pow, 2)) != fingerprint({}, functools.partial(pow, later))


def test_source_texts() -> None:
    """One text has its file's own digest; of several the names and contents count, in whatever order they come."""
    one = b"x = 1\n"
    assert fingerprint({"kernel": one}) == "sha256:" + hashlib.sha256(one).hexdigest()
    both = fingerprint({"kernel": one, "helper": b""})
    assert both == fingerprint({"helper": b"", "kernel": one})
    assert len({both, fingerprint({"kernel": b"", "helper": one}), fingerprint({"kernel": one, "other": b""})}) == 3


def found(folder: Path, listed: list[str], shared: list[str] | None = None) -> KernelSource:
    path = folder / "audit.toml"
    path.write_text(
        f'[kernel]\nrun = "kernel.py:value"\ntakes = "normals"\nmodules = {listed}\nshared = {shared or []}\n'
        "[ladder]\nhorizon = 1.0\nfinest = 2\n"
    )
    return find_kernel(read_audit_file(path))


def test_the_digest_of_a_kernel_covers_all_that_is_copied(tmp_path: Path) -> None:
    """Every file of a listed package, imported or not; no file that is not listed, or shared."""
    for name in ("kernel.py", "pkg/__init__.py", "pkg/deep/part.py", "pkg/fast.py", "apart.py"):
        (tmp_path / name).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / name).write_text(f"# {name}\n")

    def digest() -> str:
        return found(tmp_path, ["pkg"], ["pkg.fast"]).digest()

    alone = found(tmp_path, []).digest()
    assert alone == "sha256:" + hashlib.sha256(b"# kernel.py\n").hexdigest()
    seen = {alone, digest()}
    for name in ("kernel.py", "pkg/__init__.py", "pkg/deep/part.py"):
        (tmp_path / name).write_text("# changed\n")
        seen.add(digest())
    assert len(seen) == 5
    for name in ("pkg/fast.py", "apart.py"):
        (tmp_path / name).write_text("# changed\n")
        assert digest() in seen
    function = audit_file_from(
        {"kernel": {"run": fingerprint, "takes": "normals"}, "ladder": {"horizon": 1, "finest": 1}}
    )
    assert find_kernel(function).digest() == fingerprint({}, fingerprint)


def test_a_file_that_cannot_be_read(tmp_path: Path) -> None:
    """A file of a listed package that is never imported still counts, so that it must be readable."""
    (tmp_path / "kernel.py").touch()
    (tmp_path / "pkg").mkdir()
    (tmp_path / "pkg" / "__init__.py").touch()
    (tmp_path / "pkg" / "folder.py").mkdir()
    with pytest.raises(AuditFileError) as caught:
        found(tmp_path, ["pkg"]).digest()
    assert str(caught.value) == (
        f"{tmp_path / 'audit.toml'}: kernel.modules: cannot read {tmp_path / 'pkg' / 'folder.py'}: Is a directory; "
        "accepted: Python files"
    )
