"""Scripts that hold a kernel and the call that audits it: without a guard each audit would begin another, for ever."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest
from audit_cases import GEOMETRIC

# The environment counts how deep it is, so that a failure of these tests ends.
SCRIPT = (
    """
import os
import narrowgauge
"""
    + GEOMETRIC
    + """
def audited():
    depth = int(os.environ.get("DEPTH", "0"))
    os.environ["DEPTH"] = str(depth + 1)
    if depth > 2:
        os._exit(9)
    narrowgauge.audit(
        {
            "kernel": {"run": "script.py:value", "takes": "increments"},
            "ladder": {"horizon": 1.0, "finest": 1},
            "sampling": {"block": 1024, "paths": 1024, "most_paths": 1024},
        },
        workers=WORKERS,
    )
    print("done")

CALL
"""
)
REFUSED = (
    "narrowgauge.errors.KernelError: audit: an audit was started by a module that is executed for an audit; "
    "accepted: guard the call with if __name__ == '__main__'"
)


def run(folder: Path, workers: int, call: str, kernel: str = "") -> subprocess.CompletedProcess[str]:
    text = SCRIPT.replace("WORKERS", str(workers)).replace("CALL", call)
    (folder / "script.py").write_text(text.replace("    x = np", f"    {kernel}x = np", 1), encoding="utf-8")
    return subprocess.run([sys.executable, "script.py"], cwd=folder, capture_output=True, text=True, check=False)


@pytest.mark.parametrize("workers", [1, 2])
def test_an_audit_does_not_begin_another(tmp_path: Path, workers: int) -> None:
    """It is refused at the first step, in words that say what to do."""
    done = run(tmp_path, workers, "audited()")
    assert done.returncode == 1  # Python's, for an exception
    assert REFUSED in done.stderr
    assert "done" not in done.stdout


@pytest.mark.parametrize("workers", [1, 2])
def test_a_guarded_call_is_run(tmp_path: Path, workers: int) -> None:
    """Once."""
    done = run(tmp_path, workers, 'if __name__ == "__main__":\n    audited()')
    assert (done.returncode, done.stdout) == (0, "done\n"), done.stderr


@pytest.mark.parametrize("workers", [1, 2])
def test_a_kernel_does_not_audit_itself(tmp_path: Path, workers: int) -> None:
    """Where it is called, too."""
    done = run(tmp_path, workers, 'if __name__ == "__main__":\n    audited()', kernel="audited()\n    ")
    assert done.returncode == 1
    assert "an audit was started by a module that is executed for an audit" in done.stderr
