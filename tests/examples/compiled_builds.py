"""The compiled example's builds, by the commands that its audit files print."""

from __future__ import annotations

import platform
import re
import shutil
import subprocess
from pathlib import Path

import msgspec
import pytest
from example_files import EXAMPLES

from narrowgauge.kernel.auditfile import AuditFile, read_audit_file

FOLDER = EXAMPLES / "compiled"


def features() -> str:
    try:
        return Path("/proc/cpuinfo").read_text(encoding="utf-8")
    except OSError:
        return ""


needs_half = pytest.mark.skipif(platform.machine() not in ("x86_64", "AMD64"), reason="GCC's excess precision is x86's")
needs_fma = pytest.mark.skipif(re.search(r"\bfma\b", features()) is None, reason="this processor has no fused product")


def built(folder: Path, name: str) -> AuditFile:
    """Run the command that an audit file prints in its comments, and return the audit file; skips without gcc."""
    text = (folder / f"{name}.toml").read_text(encoding="utf-8")
    command = re.search(r"^# +(g(?:cc|\+\+) .+)$", text, re.MULTILINE)
    assert command is not None
    words = command[1].split()
    if shutil.which(words[0]) is None:
        pytest.skip(f"{words[0]} is not installed")
    done = subprocess.run(words, cwd=folder, capture_output=True, text=True, check=False)
    if "_Float16" in done.stderr:
        pytest.skip("this gcc has no _Float16")
    assert done.returncode == 0, done.stderr
    return read_audit_file(folder / f"{name}.toml")


def small(file: AuditFile) -> AuditFile:
    """The same audit with one look of 4,096 paths, for the time that a test may take."""
    sampling = msgspec.structs.replace(file.sampling, block=4096, paths=4096, most_paths=4096)
    return msgspec.structs.replace(file, sampling=sampling)
