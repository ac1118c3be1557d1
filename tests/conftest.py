"""What all tests share: generated examples are the same in every run, and a C compiler for those that need one."""

import shutil
import subprocess
from pathlib import Path

import hypothesis
import pytest

hypothesis.settings.register_profile("fixed", derandomize=True, deadline=None)
hypothesis.settings.load_profile("fixed")


@pytest.fixture(scope="session")
def compiled():
    """Build a shared library, or with other `flags` a program, from a C or C++ file; skips where there is no gcc."""

    def build(source: Path, target: Path, *flags: str) -> Path:
        compiler = "g++" if source.suffix == ".cpp" else "gcc"
        if shutil.which(compiler) is None:
            pytest.skip(f"{compiler} is not installed")
        options = flags or ("-O2", "-shared", "-fPIC")
        command = [compiler, *options, "-o", str(target), str(source), "-lm"]
        subprocess.run(command, check=True, capture_output=True)
        return target

    return build
