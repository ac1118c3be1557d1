"""Modules that are not listed and draw for themselves: what an audit notices of it, and what it cannot."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import pytest

from narrowgauge.api import try_out
from narrowgauge.errors import KernelError
from narrowgauge.kernel.auditfile import audit_file_from

NOT_A_FUNCTION = (
    "a second call with the same draws does not give the same bits.*The kernel is not a function of its draws alone"
)
# What draws in a module that is not listed, and whether its numbers go on from call to call.
SOURCES = {
    "a generator of the module": ("RNG = np.random.default_rng(0)\ndef noise(n): return RNG.normal(size=n)\n", True),
    "a state of the module": ("RNG = np.random.RandomState(0)\ndef noise(n): return RNG.randn(n)\n", True),
    "the module-wide functions": ("def noise(n): return np.random.normal(size=n)\n", True),
    "no seed": ("def noise(n): return np.random.default_rng().normal(size=n)\n", True),
    "Python's own": ("import random\ndef noise(n): return np.array([random.gauss(0, 1) for _ in range(n)])\n", True),
    "a seed at each call": ("def noise(n): return np.random.default_rng(0).normal(size=n)\n", False),
    "a seed of all at each call": (
        "def noise(n):\n    np.random.seed(0)\n    return np.random.normal(size=n)\n",
        False,
    ),
}
KERNELS = {
    "increments": "import own_draws\ndef kernel(dW, h):\n    return dW.sum(axis=0) + own_draws.noise(dW.shape[1])\n",
    "rng": "import own_draws\ndef kernel(rng, h, *, steps, paths):\n    x = rng.normal(size=(steps, paths))\n"
    "    return x.sum(axis=0) + own_draws.noise(paths)\n",
}


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Any:
    """A folder on Python's path for the module; what is imported from it is forgotten afterwards."""
    monkeypatch.syspath_prepend(tmp_path / "apart")
    (tmp_path / "apart").mkdir()
    yield tmp_path
    sys.modules.pop("own_draws", None)


@pytest.mark.parametrize("takes", KERNELS)
@pytest.mark.parametrize("name", SOURCES)
def test_numbers_from_elsewhere(folder: Path, name: str, takes: str) -> None:
    """Numbers that go on from call to call are no function of the draws, and refused before anything is measured.

    Those of a generator that is seeded at each call are the same for every format, level and path: they pass for
    constants, as the README says.
    """
    text, goes_on = SOURCES[name]
    (folder / "apart" / "own_draws.py").write_text("import numpy as np\n" + text, encoding="utf-8")
    (folder / "kernel.py").write_text(KERNELS[takes], encoding="utf-8")
    kernel: dict[str, Any] = {"run": f"{folder / 'kernel.py'}:kernel", "takes": takes}
    file = audit_file_from({"kernel": kernel, "ladder": {"horizon": 1.0, "finest": 1}})
    if goes_on:
        with pytest.raises(KernelError, match=NOT_A_FUNCTION):
            try_out(file)
        return
    tried = try_out(file)
    assert tried.identical
    assert tried.faults == []


@pytest.mark.parametrize("takes", KERNELS)
def test_listed_they_draw_from_the_tape_or_are_refused(folder: Path, takes: str) -> None:
    """The same module in the list: its generator is a stand-in, which a kernel of increments has no tape for."""
    (folder / "own_draws.py").write_text("import numpy as np\n" + SOURCES["a seed at each call"][0], encoding="utf-8")
    (folder / "kernel.py").write_text(KERNELS[takes], encoding="utf-8")
    kernel: dict[str, Any] = {"run": f"{folder / 'kernel.py'}:kernel", "takes": takes, "modules": ["own_draws"]}
    tried = try_out(audit_file_from({"kernel": kernel, "ladder": {"horizon": 1.0, "finest": 1}}))
    assert (tried.faults == []) == (takes == "rng")
    if takes != "rng":
        assert "own_draws.py:2: Generator.normal is not offered by this version" in tried.faults[0].message
