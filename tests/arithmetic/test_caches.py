"""Where numba is missing, switched off, or has no sound cache: the same numbers, and a note that says so."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from narrowgauge.arithmetic import compiled

numba = pytest.importorskip("numba")
if compiled.kernel("words") is None:
    pytest.skip("NARROWGAUGE_COMPILED=0", allow_module_level=True)

TEMPORARY = "numba's usual folder cannot be written: each process compiled anew, into a temporary folder"
UNWRITABLE = {"NUMBA_CACHE_LOCATOR_CLASSES": "UserProvidedCacheLocator"}  # of which none is provided


def in_a_new_process(code: str, **environment: str) -> str:
    """Run a program and return what it printed."""
    path = os.pathsep.join(filter(None, sys.path))
    run = subprocess.run(
        [sys.executable, "-c", code],
        env={**os.environ, "PYTHONPATH": path, **environment},
        capture_output=True,
        text=True,
        check=True,
    )
    return run.stdout.strip()


ROUND = """
import sys, numpy as np
from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic import compiled
print("numba" in sys.modules, end=" ")
print(arithmetic_named("float16").cast(np.array([0.1, 1e-7, 7e4])).tolist(), "numba" in sys.modules, compiled.note())
"""


def test_numba_is_imported_by_the_first_arithmetic_that_rounds() -> None:
    """Not by an import of the package, and not at all by float64 to nearest."""
    assert in_a_new_process(ROUND).endswith("[0.0999755859375, 1.1920928955078125e-07, inf] True None")
    assert in_a_new_process(ROUND).startswith("False ")
    code = ROUND.replace('"float16"', '"float64"')
    assert in_a_new_process(code).endswith("[0.1, 1e-07, 70000.0] False None")


def test_the_switch_leaves_numba_alone() -> None:
    """NARROWGAUGE_COMPILED=0: the same numbers, no numba, and a note that says so."""
    found = in_a_new_process(ROUND, NARROWGAUGE_COMPILED="0")
    assert found == (
        "False [0.0999755859375, 1.1920928955078125e-07, inf] False NARROWGAUGE_COMPILED=0: roundings were not compiled"
    )


def test_without_numba_numpy_rounds_and_a_note_says_so() -> None:
    """The extra is missing: the same numbers."""
    found = in_a_new_process("import sys; sys.modules['numba'] = None\n" + ROUND)
    assert "[0.0999755859375, 1.1920928955078125e-07, inf]" in found
    assert found.endswith(
        "numba is not installed, or does not go with this NumPy: roundings were not compiled (extra: fast)"
    )


def without_folders() -> None:
    """Skip where numba cannot be told to find no folder."""
    if not hasattr(numba.config, "CACHE_LOCATOR_CLASSES"):
        pytest.skip("this numba cannot be told to leave out its usual folders")


def test_a_temporary_folder_serves_where_the_usual_one_cannot_be_written(tmp_path: Path) -> None:
    """The same numbers, and a note; the folder was used, and is gone when the process has ended."""
    without_folders()
    code = ROUND + (
        "import os, tempfile\n"
        "folder, = os.listdir(tempfile.gettempdir())\n"
        "print(sum(name.endswith('.nbc') for _, _, names in os.walk(tempfile.gettempdir()) for name in names) > 0)\n"
    )
    found = in_a_new_process(code, TMPDIR=str(tmp_path), **UNWRITABLE)
    assert found.endswith(f"[0.0999755859375, 1.1920928955078125e-07, inf] True {TEMPORARY}\nTrue")
    assert list(tmp_path.iterdir()) == []


def test_a_users_own_functions_are_cached_as_ever(tmp_path: Path) -> None:
    """Where ours need a temporary folder numba's settings are left alone, and none of his functions lies in it."""
    without_folders()
    code = ROUND + (
        "import numba, os, tempfile, colorsys\n"
        "print(repr(numba.config.CACHE_DIR))\n"
        "try: numba.njit(cache=True)(colorsys.rgb_to_yiq)\n"
        "except RuntimeError as error: print(error)\n"
    )
    *_, setting, refused = in_a_new_process(code, TMPDIR=str(tmp_path), **UNWRITABLE).splitlines()
    assert setting == "''"
    assert refused.startswith("cannot cache function 'rgb_to_yiq': no locator available")


def test_a_cache_that_cannot_be_written_after_all_does_not_stop_a_rounding(tmp_path: Path) -> None:
    """A full disk: compiled for this process alone, with a note."""
    code = (
        "import numba.core.caching as caching\n"
        "def refuse(*given): raise OSError(28, 'No space left on device')\n"
        "caching.IndexDataCacheFile.save = refuse\n" + ROUND
    )
    found = in_a_new_process(code, NUMBA_CACHE_DIR=str(tmp_path))
    start = "[0.0999755859375, 1.1920928955078125e-07, inf] True numba's cache cannot be used (OSError): each process "
    assert f"{start}compiled anew; empty {tmp_path}" in found


@pytest.mark.parametrize("kept", [0.0, 0.5], ids=["empty", "cut in half"])
@pytest.mark.parametrize("kind", ["nbi", "nbc"])
def test_a_cache_that_was_cut_short_does_not_stop_a_rounding(kind: str, kept: float, tmp_path: Path) -> None:
    """An index or a file of code that a crash left: the same numbers, and a note that says which folder to empty."""
    sound = in_a_new_process(ROUND, NUMBA_CACHE_DIR=str(tmp_path))
    assert sound.endswith("inf] True None")
    spoilt = list(tmp_path.rglob(f"*.{kind}"))
    for path in spoilt:
        path.write_bytes(path.read_bytes()[: int(kept * path.stat().st_size)])
    assert len(spoilt) > 1
    found = in_a_new_process(ROUND, NUMBA_CACHE_DIR=str(tmp_path))
    assert found.startswith(sound.removesuffix("None") + "numba's cache cannot be used (")
    assert found.endswith(f"): each process compiled anew; empty {spoilt[0].parent}")


def test_numpy_rounds_where_nothing_can_be_compiled() -> None:
    """A compiler that fails altogether, in loops and in ufuncs: the same numbers, and a note."""
    code = (
        "import numba\n"
        "def refuse(*given, **keywords): raise SystemError('no compiler')\n"
        "numba.njit = numba.cfunc = numba.vectorize = refuse\n" + ROUND
    )
    found = in_a_new_process(code)
    start = "True [0.0999755859375, 1.1920928955078125e-07, inf] True"
    assert found == f"{start} numba cannot compile here (SystemError): NumPy did some of the roundings"
