"""The part of a record on sums: which branches it has, and that its figures are those of the judge."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from audit_cases import GEOMETRIC, audited, file_for

from narrowgauge.arithmetic.formats import format_named
from narrowgauge.draws.streams import GRAIN
from narrowgauge.judge.averaging import Terms, largest_count
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.record.averaging import AveragingEntry

TARGET = {"target": {"rmse": "2e-3", "bias_share": "0.9"}}
FORMATS = ["bfloat16", "float16", "float32", "float64"]  # from least to most precision


def part(folder: Path, source: str, **tables: dict[str, str]) -> AveragingEntry:
    found = audited(folder, source, **tables).record.averaging
    assert found is not None
    return found


def test_every_branch_of_the_plan_is_there(tmp_path: Path) -> None:
    """Low and correction branches with the plan's own paths, in every format and order."""
    record = audited(tmp_path, GEOMETRIC, **TARGET).record
    plan = record.quantities["value"].allocation.levels
    assert plan
    assert record.averaging is not None
    wanted = {(one.level, "low", one.paths) for one in plan}
    wanted |= {(one.level, "correction", one.correction_paths) for one in plan if one.correction_paths is not None}
    entries = record.averaging.quantities["value"]
    assert len(wanted) > len(plan), "some level is split"
    assert len(entries) == len(wanted)
    assert {(one.level, one.branch, one.paths) for one in entries} == wanted
    for one in entries:
        assert list(one.formats) == FORMATS
        assert one.standard_error is not None
        for sums in one.formats.values():
            for order in (sums.running, sums.pairwise):
                assert (order.share is None) == (order.reason == "range")
    level = entries[0]
    assert (level.formats["bfloat16"].running.share or 0.0) > 1.0, "x is about 1 and stops near 256"
    exact = level.formats["float64"].running.share
    assert exact is not None
    assert exact < 1e-6


def test_without_a_target_there_is_no_plan_but_a_largest_number_of_paths(tmp_path: Path) -> None:
    """The reference's level differences decide it; no other figure exists."""
    file = file_for(tmp_path, GEOMETRIC)
    found = part(tmp_path, GEOMETRIC)
    assert found.paths == GRAIN
    entries = found.quantities["value"]
    assert [(one.level, one.branch, one.paths, one.narrow) for one in entries] == [
        (level, "low", None, "float64") for level in range(3)
    ]
    sums = entries[0].formats["bfloat16"].running
    assert (sums.bias, sums.share, sums.reason) == (None, None, "no plan")
    sample = BlockRunner(file, find_kernel(file)).differences(0, GRAIN)["float64"]["value"]
    level = audited(tmp_path, GEOMETRIC).record.quantities["value"].levels[0].reference
    terms = Terms(sample, level.level_mean, level.level_variance)
    assert sums.largest == largest_count(terms, format_named("bfloat16"), "running")


def test_the_number_of_paths_is_where_a_real_sum_goes_wrong(tmp_path: Path) -> None:
    """bfloat16, payoffs about 1: past the largest number NumPy-like running sums err by more than the bound.

    2,000 sums of twice that number; their root mean square error over the standard error is above .1, and of a
    quarter of it below. The model is good to a few per cent there.
    """
    averaging = part(tmp_path, GEOMETRIC)
    largest = averaging.quantities["value"][0].formats["bfloat16"].running.largest
    assert largest is not None
    storage = format_named("bfloat16").storage
    shares = []
    for count in (largest // 4, largest * 2):
        values = (1.0 + 0.05 + 0.2 * np.random.default_rng(3).normal(size=(2000, count))).astype(storage)
        summed = values[:, 0].copy()
        for column in values.T[1:]:
            summed = summed + column
        errors = summed.astype(np.float64) - values.astype(np.float64).sum(axis=1)
        shares.append(np.sqrt(np.mean(errors**2) / count) / 0.2)
    assert shares[0] < averaging.share < shares[1]


def test_a_constant_has_nothing_to_sum(tmp_path: Path) -> None:
    """No variance, no standard error to compare with."""
    found = part(tmp_path, "def value(dW, h):\n    return 0.0 * dW[0] + 1.0\n")
    assert {one.reason for one in found.quantities["value"]} == {"no variance"}
    assert all(one.formats == {} for one in found.quantities["value"])


def test_an_arm_that_raises_leaves_the_others(tmp_path: Path) -> None:
    """What float16 raises is kept out of the sample; the reference's own branches are there."""
    source = """
    def value(dW, h):
        x = 300.0 + dW[0]
        x = x * x
        if not (x < 1e5).all():
            raise OverflowError("too large")
        return x
    """
    file = file_for(tmp_path, source)
    runner = BlockRunner(file, find_kernel(file))
    assert "float16" not in runner.differences(1, GRAIN)
    assert part(tmp_path, source).quantities["value"][0].formats["float16"].running.largest is not None


@pytest.mark.parametrize("level", [0, 2])
def test_differences_are_those_of_the_blocks(tmp_path: Path, level: int) -> None:
    """Fine less coarse on the same draws, on level 0 the quantity itself."""
    file = file_for(tmp_path, GEOMETRIC)
    found = BlockRunner(file, find_kernel(file)).differences(level, GRAIN)["float64"]["value"]
    assert found.shape == (GRAIN,)
    assert found.std() == pytest.approx(0.21 if level == 0 else 0.01, rel=0.5)
