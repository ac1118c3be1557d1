"""The reserve example, audited once for all tests of this folder."""

import subprocess
import sys

import pytest
from example_files import EXAMPLES


@pytest.fixture(scope="session")
def run():
    """Run a command of the program in a folder."""

    def command(folder, *words):
        program = [sys.executable, "-m", "narrowgauge", *words]
        return subprocess.run(program, cwd=folder, check=False, capture_output=True, text=True)

    return command


@pytest.fixture(scope="session")
def reserve(tmp_path_factory, run):
    """The folder in which the reserve example was audited, as the README says, and how that ended."""
    folder = tmp_path_factory.mktemp("reserve")
    return folder, run(folder, "audit", str(EXAMPLES / "reserve" / "reserve.toml"))
