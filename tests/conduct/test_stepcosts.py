"""Measured costs of a step: medians of formats in turns, judged by, kept by --resume, and the record's own figure."""

from __future__ import annotations

from pathlib import Path

import msgspec
import pytest
from audit_cases import file_for

from narrowgauge.api import run_audit
from narrowgauge.conduct import run as run_module
from narrowgauge.conduct.stepcosts import step_costs, with_costs
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.calls import Caller
from narrowgauge.report.settings import measured_costs

SOURCE = """
import numpy as np

def value(dW, h):
    one = dW.dtype.type
    x = np.ones(dW.shape[1], dW.dtype)
    for dw in dW:
        x = x + (one(0.05 * h) * x + one(0.2) * x * dw)
    return x
"""
# Of one step of one path; by bits per value, since a caller does not tell its arm.
TIMES = {"float64": 8e-9, "float32": 4e-9, "float16": 2e-9, "bfloat16": 16e-9}


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """Let the times of a call be those of TIMES, thrice that for every third one; returns the arms in their turns."""
    turns: list[str] = []

    def seconds(self: Caller, drawn, level: int) -> float:
        arm = self._arithmetic.format.name
        turns.append(arm)
        slow = 3.0 if turns.count(arm) % 3 == 0 else 1.0
        return TIMES[arm] * drawn.shape[0] * drawn.shape[-1] * slow

    monkeypatch.setattr(Caller, "seconds", seconds)
    return turns


def asked(folder: Path) -> AuditFile:
    return file_for(folder, SOURCE, kernel={"rounds": '"itself"'}, cost={"measured": "true", "draws": "0.5"})


def test_costs_are_medians_of_formats_in_turns(tmp_path: Path, clock: list[str]) -> None:
    """Eleven of each after one that nobody counts, float64 being 1; a third of slow calls does not move a median."""
    file = asked(tmp_path)
    runner = BlockRunner(file, find_kernel(file))
    costs = step_costs(file, runner)
    assert clock == list(runner.arms) * 12
    assert {arm: one.cost for arm, one in costs.items()} == pytest.approx(
        {"float64": 1.0, "float32": 0.5, "float16": 0.25, "bfloat16": 2.0}
    )
    assert costs["float32"].nanoseconds == pytest.approx(4.0)
    assert (costs["float32"].fastest, costs["float32"].slowest) == pytest.approx((4.0, 12.0))
    assert costs["float32"].runs == 11


def test_real_times_are_there(tmp_path: Path) -> None:
    """Of the kernel itself, without a claim about how long it takes."""
    file = asked(tmp_path)
    costs = step_costs(file, BlockRunner(file, find_kernel(file)))
    assert costs["float64"].cost == 1.0
    assert all(0 < one.fastest <= one.nanoseconds <= one.slowest for one in costs.values())


def test_a_format_that_raises_costs_what_the_reference_does(tmp_path: Path) -> None:
    """It will not be chosen, and its cost must be some number."""
    source = SOURCE.replace("    one =", "    if dW.dtype == np.float16:\n        raise ValueError('no')\n    one =")
    file = file_for(tmp_path, source, kernel={"rounds": '"itself"'}, cost={"measured": "true"})
    costs = step_costs(file, BlockRunner(file, find_kernel(file)))
    assert costs["float16"] == costs["float64"]


def test_an_audit_judges_by_them(tmp_path: Path, clock: list[str]) -> None:
    """With the times of 4 and 16 bytes bfloat16 does not pay, and the gain of float32 alone is about 2."""
    record = run_audit(asked(tmp_path), None).record
    assert record.costs is not None
    assert record.costs["bfloat16"].cost == pytest.approx(2.0)
    assert record.asked["cost"]["float32"] is None  # type: ignore[index]
    assert record.asked["cost"]["draws"] == 0.5  # type: ignore[index]
    arms = record.quantities["value"].levels[2].arms
    assert arms["bfloat16"].verdict == "does not pay"
    # A path of level 2 takes 4 fine and 2 coarse steps and 4 draws at .5 each.
    assert arms["float32"].gain == pytest.approx((6 * 1.0 + 4 * 0.5) / (6 * 0.5 + 4 * 0.5), rel=1e-3)
    assert "float32 0.500 (4.00 ns, 4.00 to 12.0)" in measured_costs(record)
    assert measured_costs(record).endswith("medians of 11 runs in turns on this machine")


def test_the_file_that_is_judged_by_keeps_what_was_asked(tmp_path: Path, clock: list[str]) -> None:
    """Only the costs of a step are put in."""
    file = asked(tmp_path)
    timed = with_costs(file, step_costs(file, BlockRunner(file, find_kernel(file))))
    assert timed.asked() == file.asked()
    assert (timed.costs.step("float16"), timed.costs.draws) == (0.25, 0.5)
    assert with_costs(file, None) is file


def test_resuming_keeps_the_costs_of_the_audit_that_was_stopped(
    tmp_path: Path, clock: list[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """What was measured before the stop is in the record after it, and nothing is measured again; a new audit does."""
    file = asked(tmp_path)

    def stopped(*_: object) -> None:
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr(run_module, "judge_level", stopped)
        with pytest.raises(KeyboardInterrupt):
            run_audit(file, tmp_path / "out")
    clock.clear()
    for arm in TIMES:
        monkeypatch.setitem(TIMES, arm, 1e-9)
    resumed = run_audit(file, tmp_path / "out", resume=True).record
    assert clock == []
    assert resumed.costs is not None
    assert resumed.costs["bfloat16"].cost == pytest.approx(2.0)
    text = (tmp_path / "out" / "audit.json").read_bytes()
    assert msgspec.json.decode(text)["costs"]["float32"]["nanoseconds"] == pytest.approx(4.0)
    again = run_audit(file, tmp_path / "out").record
    assert again.costs is not None
    assert again.costs["bfloat16"].cost == pytest.approx(1.0)
    assert clock != []
