"""A path must not hang on the paths beside it, memory layouts, threads or earlier calls: seeded defects, and none."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import pytest
from branch_cases import PATH, audit_file, checked

from narrowgauge.conduct.branches import branches_entry, broken_splits
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.record.branches import BranchesEntry

EMULATED: Mapping[str, str] = {"rounds": ""}
MATCHED = """
import numpy as np

def path(dW, h):
    s = np.ones(dW.shape[-1])
    for dw in dW:
        centre = dw.mean()
        s = s + 0.2 * s * (dw - centre)
    return s
"""
CONTRACTED = """
import numpy as np

A = np.random.default_rng(1).standard_normal((256, 256))

def path(dW, h):
    x = np.ones((256, dW.shape[-1]))
    for dw in dW:
        x = x + dw
    return (A @ x)[0]
"""


def alone(folder: Path, source: str, **tables: Mapping[str, str] | None) -> BranchesEntry:
    """The check of a kernel that is both branches."""
    return checked(folder, source, **{"branches": None, **tables})


def conditions(entry: BranchesEntry) -> set[str]:
    return {one.condition for one in entry.mismatches}


@pytest.mark.parametrize("rounds", ["", '"itself"'])
def test_a_kernel_alone_is_tried_under_every_condition(tmp_path: Path, rounds: str) -> None:
    """Without [branches]: batch sizes, layouts, threads, repeats, and other draws on a few paths; all bits agree."""
    source = PATH if rounds else PATH.replace("T = dW.dtype.type", "T = float")
    formats = {"narrow": '["float16", "bfloat16", "float32"]'}
    entry = alone(tmp_path, source, kernel={"rounds": rounds}, formats=formats)
    assert entry.mismatches == []
    assert entry.remarks == []
    assert [(one.arm, one.level) for one in entry.tried] == [
        (arm, level) for arm in ("bfloat16", "float16", "float32") for level in (3, 0)
    ]
    for one in entry.tried:
        assert (one.paths, one.batches, one.orders) == (0, [1, 3, 7, 8, 64], ["C", "Fortran", "strided", "reversed"])
        assert (one.varied, one.threads, one.repeats, one.changed) == (1024, 2, 2, 3)


@pytest.mark.parametrize("rounds", ["", '"itself"'])
def test_moment_matching_couples_paths(tmp_path: Path, rounds: str) -> None:
    """A changed path changes the others through a mean: the line of the mean is named, and no split is used."""
    entry = alone(tmp_path, MATCHED, kernel={"rounds": rounds})
    assert {"influence", "paths"} <= conditions(entry)
    found = next(one for one in entry.mismatches if one.condition == "influence" and one.level == 3)
    assert found.differing > 500
    assert found.where is not None
    assert found.where.low is not None
    assert (found.where.low.file, found.where.low.line) == ("kernel.py", 6)
    assert not found.numpys_own
    assert all("float16" in broken_splits(entry, level) for level in range(4))


def test_a_contraction_whose_bits_hang_on_the_batch_is_numpys_own(tmp_path: Path) -> None:
    """A product of matrices with one column is another routine: NumPy differs from itself, in float32 alone."""
    entry = alone(tmp_path, CONTRACTED, kernel=EMULATED, formats={"narrow": '["float16", "float32"]'})
    found = [one for one in entry.mismatches if one.condition == "paths"]
    if not found:
        pytest.skip("this machine's routines sum in one order for every number of columns")
    assert {one.arm for one in found} == {"float32"}
    assert all(one.numpys_own and one.splits == "not admissible" for one in found)
    assert found[0].where is not None
    assert found[0].where.low is not None
    assert (found[0].where.low.line, found[0].where.low.operation) == (9, "matmul")
    assert broken_splits(entry, 2) == {"float32"}


def test_a_function_that_reads_memory_is_found_by_layouts(tmp_path: Path) -> None:
    """Draws taken in the order in which they lie belong to other paths in another layout."""
    source = """
    import numpy as np

    def path(dW, h):
        flat = dW.ravel("K").reshape(dW.shape)
        return flat.sum(axis=0)
    """
    entry = alone(tmp_path, source)
    assert {one.detail for one in entry.mismatches if one.condition == "layout"} >= {"in Fortran's order"}


def test_a_buffer_that_calls_share_is_found_by_threads(tmp_path: Path) -> None:
    """Two calls at once write into one module's buffer."""
    source = """
    import time

    ROOM = {}

    def path(dW, h):
        ROOM["end"] = dW[0] * dW[0]
        time.sleep(0.01)
        return ROOM["end"]
    """
    assert conditions(alone(tmp_path, source)) == {"threads"}


def test_a_call_that_remembers_is_found_by_a_repeat(tmp_path: Path) -> None:
    """A second call with the same draws gives other numbers."""
    source = """
    CALLS = []

    def path(dW, h):
        CALLS.append(0)
        return dW.sum(axis=0) + dW.dtype.type(len(CALLS))
    """
    assert "repeat" in conditions(alone(tmp_path, source))


def test_what_a_kernel_does_not_take_is_said(tmp_path: Path) -> None:
    """One that works on groups of 32 paths is not tried with fewer."""
    source = """
    import numpy as np

    def path(dW, h):
        return (dW[0] * dW[0]).reshape(-1, 32).reshape(-1)
    """
    entry = alone(tmp_path, source)
    assert entry.mismatches == []
    assert any(one.startswith("float16: 7 paths a call could not be tried, ValueError") for one in entry.remarks)


def test_a_kernel_that_draws_for_itself_is_repeated(tmp_path: Path) -> None:
    """Its numbers come in the order in which it asks for them, so that nothing else can be varied."""
    source = """
    import numpy as np

    def path(rng, h, *, steps, paths):
        s = np.ones(paths)
        for n in range(steps):
            s = s + 0.2 * s * np.sqrt(h) * rng.standard_normal(paths)
        return s
    """
    entry = alone(tmp_path, source, kernel={"rounds": "", "takes": '"rng"'})
    assert entry.mismatches == []
    assert {(one.varied, one.repeats, tuple(one.batches)) for one in entry.tried} == {(1024, 2, ())}
    assert "batch sizes, memory layouts" in entry.remarks[0]


def test_a_kernel_of_one_path_has_no_batches(tmp_path: Path) -> None:
    """It is repeated and run in two threads."""
    source = """
    import math

    def path(dW, h):
        s = 1.0
        for dw in dW:
            if s > 0.5:
                s = s + 0.2 * s * dw
        return math.exp(s)
    """
    entry = alone(tmp_path, source, kernel={"rounds": "", "layout": '"steps"'})
    assert entry.mismatches == []
    assert {(one.repeats, one.threads) for one in entry.tried} == {(2, 2)}


def test_no_split_no_branches(tmp_path: Path) -> None:
    """Where every scheme is one format alone there is nothing to compare."""
    file = audit_file(tmp_path, PATH, branches=None, formats={"schemes": '["alone"]'})
    kernel = find_kernel(file)
    assert branches_entry(file, kernel, BlockRunner(file, kernel)) is None
