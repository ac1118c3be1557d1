"""The search for a cause runs no manner in vain, and finds what it would if every one of them were run."""

from __future__ import annotations

from pathlib import Path

import pytest
from branch_cases import audit_file

from narrowgauge.conduct import branchemulation
from narrowgauge.conduct.branchcauses import Causes, Run, located, narrow_down
from narrowgauge.conduct.branchcomparison import Comparer
from narrowgauge.conduct.branchemulation import Case, Emulation
from narrowgauge.dispatch.looser import Manner
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.branchruns import Given, branch_sources
from narrowgauge.measure.calls import Quantities

# A path with five lines of two products; the correction fuses the first one of some lines and the last one of others.
PATH = """def path(dW, h):
    T = dW.dtype.type
    p, q, s = T(0.6), T(0.37), np.full(dW.shape[-1], T(1.0))
    for dw in dW:
        a = p * s + q * dw
        b = p * a - q * s
        c = p * b + q * a
        d = p * c - q * b
        s = p * d + q * c
    return s
"""
LINES = f"""
import numpy as np

{PATH}
def fma(x, y, z):
    return (np.float64(x) * np.float64(y) + np.float64(z)).astype(z.dtype)

def low(dW, h):
    T = dW.dtype.type
    p, q, s = T(0.6), T(0.37), np.full(dW.shape[-1], T(1.0))
    for dw in dW:
        a = fma(p, s, q * dw)
        b = fma(-q, s, p * a)
        c = fma(p, b, q * a)
        d = fma(-q, b, p * c)
        s = fma(p, d, q * c)
    return s

def correction(draws, h):
    return low(draws[0], h), path(draws[1], h)
"""
REORDERED = LINES.replace(
    "    return low(draws[0], h), path(draws[1], h)", "    return other(draws[0], h), path(draws[1], h)"
)
REORDERED += PATH.replace("def path", "def other").replace("s = p * d + q * c", "s = (p * d + q * c) + p * dw - p * dw")
# Products that are stored before they are added, where across lines is another manner; and decisions on the state.
STORED = LINES.replace("        a = p * s + q * dw\n", "        first = p * s\n        a = first + q * dw\n", 1)
DECIDING = STORED.replace(
    "        b = p * a - q * s\n", "        b = p * a - q * s if a.max() > 2 else p * s - q * a\n", 1
)
# A path that hangs on the others: a few of them say nothing of all.
MIXING = LINES.replace("    for dw in dW:\n", "    for dw in dW:\n        s = s - s.min()\n")


def case_of(folder: Path, source: str) -> tuple[Case, tuple[Run, Run]]:
    """Return the first case in which the two branches differ on the last level, and the two functions."""
    file = audit_file(folder, source)
    kernel = find_kernel(file)
    comparer = Comparer(BlockRunner(file, kernel), branch_sources(file, kernel), "float16", "float64", rows=True)
    case = comparer.level(2, 1024)["value"].case
    assert case is not None
    return case, (comparer.run(0, case.level), comparer.run(1, case.level))


class Alone(Emulation):
    """Runs every manner, on all paths."""

    def gives(self, manner: Manner) -> bool:
        """Forget what was run, and do not screen."""
        self._done.clear()
        self._screens = False
        return super().gives(manner)


@pytest.mark.parametrize(
    ("source", "explained"), [(LINES, True), (REORDERED, False), (STORED, True), (DECIDING, False), (MIXING, True)]
)
def test_the_same_causes_are_left_as_if_each_were_run_on_all_paths(
    tmp_path: Path, source: str, explained: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Manner by manner and side by side."""
    case, runs = case_of(tmp_path, source)
    found, _ = located(*runs, case.followed(), "value")
    shared, alone = Causes(), Causes()
    narrow_down(shared, runs, case, "value", found)
    monkeypatch.setattr("narrowgauge.conduct.branchcauses.Emulation", Alone)
    narrow_down(alone, runs, case, "value", found)
    assert shared.left == alone.left
    assert bool(shared.left) == explained


@pytest.mark.parametrize(("source", "asked", "made"), [(LINES, 132, 42), (REORDERED, 264, 79)])
def test_runs_are_shared(tmp_path: Path, source: str, asked: int, made: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """Five lines of two products have 32 choices, across lines or not: a third is run, and few of these on all paths.

    On all paths: each side as usual and to see its lines, and what explains the difference in LINES.
    """
    case, runs = case_of(tmp_path, source)
    found, _ = located(*runs, case.followed(), "value")
    questions, paths = 0, []

    class Counted(branchemulation.Branch):
        def on(self, draws: Given, level: int) -> Quantities:
            paths.append(draws.narrow.shape[-1])
            return super().on(draws, level)

    class Asked(Emulation):
        def gives(self, manner: Manner) -> bool:
            nonlocal questions
            questions += self._usual
            return super().gives(manner)

    monkeypatch.setattr(branchemulation, "Branch", Counted)
    monkeypatch.setattr("narrowgauge.conduct.branchcauses.Emulation", Asked)
    narrow_down(Causes(), runs, case, "value", found)
    assert (questions, len(paths)) == (asked, made)
    assert sum(number > 64 for number in paths) == 4
