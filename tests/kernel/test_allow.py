"""kernel.allow: lines of files that are copied, and every other entry refused with the key, word for word."""

from __future__ import annotations

from pathlib import Path

import pytest

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.setting import Place
from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.auditfile import audit_file_from, read_audit_file
from narrowgauge.kernel.loading import KernelSource, find_kernel, private_copy

KERNEL = "import plant.tank\n\n\ndef value(z, h):\n    return float(z[0, 0]) + z[0]\n"


def found(folder: Path, *allow: str) -> KernelSource:
    """Write a kernel of five lines, a package and a file beside them, and find the kernel with these lines allowed."""
    (folder / "models").mkdir(exist_ok=True)
    (folder / "models" / "kernel.py").write_text(KERNEL)
    (folder / "models" / "plant").mkdir(exist_ok=True)
    (folder / "models" / "plant" / "__init__.py").write_text("")
    (folder / "models" / "plant" / "tank.py").write_text("a = 1\nb = 2\n")
    (folder / "models" / "other.py").write_text("a = 1\n")
    path = folder / "audit.toml"
    path.write_text(
        f'[kernel]\nrun = "models/kernel.py:value"\ntakes = "normals"\nmodules = ["plant"]\nallow = {list(allow)}\n'
        "[ladder]\nhorizon = 1.0\nfinest = 2\n"
    )
    return find_kernel(read_audit_file(path))


def test_lines_of_the_kernel_and_of_listed_modules(tmp_path: Path) -> None:
    """Each becomes a place in a resolved file, also of a module that is imported later, and reaches every setting."""
    kernel = found(tmp_path, "models/kernel.py:5", "models/plant/tank.py:2", "models/../models/kernel.py:1")
    folder = tmp_path.resolve() / "models"
    assert kernel.allowed == {
        "models/kernel.py:5": Place(str(folder / "kernel.py"), 5),
        "models/plant/tank.py:2": Place(str(folder / "plant" / "tank.py"), 2),
        "models/../models/kernel.py:1": Place(str(folder / "kernel.py"), 1),
    }
    setting = private_copy(kernel, arithmetic_named("float16")).setting
    assert setting is not None
    assert setting.allowed == set(kernel.allowed.values())


def test_nothing_is_allowed_by_default(tmp_path: Path) -> None:
    """Without the key no line lets a value out."""
    assert found(tmp_path).allowed == {}


COPIED = "accepted: lines of the kernel's file and of those in kernel.modules"


@pytest.mark.parametrize(
    ("entry", "words"),
    [
        (
            "models/kernel.py:6",
            '"models/kernel.py:6": the file ends with line 5; accepted: a line from 1 to 5',
        ),
        (
            "kernel.py:4",
            '"kernel.py:4": no such file: {folder}/kernel.py; accepted: an array of lines such as "model.py:41", '
            "each once",
        ),
        ("models/other.py:1", f'"models/other.py:1": that file is not copied; {COPIED}'),
        ("audit.toml:1", f'"audit.toml:1": that file is not copied; {COPIED}'),
    ],
)
def test_an_entry_that_is_no_line_of_the_kernel(tmp_path: Path, entry: str, words: str) -> None:
    """It is refused before anything runs, with its file and key."""
    with pytest.raises(AuditFileError) as caught:
        found(tmp_path, "models/kernel.py:5", entry)
    message = words.replace("{folder}", str(tmp_path.resolve()))
    assert str(caught.value) == f"{tmp_path / 'audit.toml'}: kernel.allow: {message}"


def test_a_function_that_is_handed_over_allows_lines_of_its_file() -> None:
    """Its own file is copied as far as the function reaches; another one is not."""
    here = Path(__file__).resolve()
    for allow, refused in ((f"{here}:1", False), (f"{here.parent / 'auditfile_cases.py'}:1", True)):
        file = audit_file_from(
            {
                "kernel": {"run": found, "takes": "normals", "allow": [allow]},
                "ladder": {"horizon": 1.0, "finest": 1},
            }
        )
        if not refused:
            assert find_kernel(file).allowed == {allow: Place(str(here), 1)}
            continue
        with pytest.raises(AuditFileError, match="that file is not copied"):
            find_kernel(file)
