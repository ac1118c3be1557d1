"""The audit of a kernel that takes one path a call: what is said, and that the time is said first."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import pytest
from audit_cases import GEOMETRIC, audited, file_for

from narrowgauge.conduct.run import Plan, run
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.tally import LevelTally

BUFFER = """
import numpy as np

def value(dW, h):
    x = np.ones(len(dW) + 1)
    for n in range(len(dW)):
        x[n + 1] = x[n] + 0.05 * h * x[n] + 0.2 * x[n] * dW[n]
    return x[-1]
"""
SINGLE = {"layout": '"steps"'}
SAID = (
    "the kernel takes one path a call and is run path by path, which is slow: "
    "kernel.py:6: with a row of paths it raises ValueError: setting an array element with a sequence."
)


class Log:
    """A watcher that notes the plan, in one list with the blocks."""

    def __init__(self, events: list[object]) -> None:
        self.events = events

    def planned(self, plan: Plan) -> None:
        self.events.append(plan)

    def look(self, number: int, looks: int, levels: Sequence[int], path_steps: int) -> None:
        pass

    def advanced(self, steps: int) -> None:
        pass


@pytest.mark.parametrize(("source", "kernel", "first"), [(BUFFER, SINGLE, "plan"), (GEOMETRIC, {}, "block")])
def test_the_time_is_said_before_a_block(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, source: str, kernel: dict[str, str], first: str
) -> None:
    """Path by path the plan comes before any block; else the block that was timed for it comes before the plan."""
    events: list[object] = []
    original = BlockRunner.run

    def noted(self: BlockRunner, level: int, block: int) -> LevelTally:
        events.append((level, block))
        return original(self, level, block)

    monkeypatch.setattr(BlockRunner, "run", noted)
    file = file_for(tmp_path, source, kernel=kernel)
    run(file, find_kernel(file), watcher=Log(events))
    plans = [event for event in events if isinstance(event, Plan)]
    assert len(plans) == 1
    assert plans[0].seconds > 0
    assert isinstance(events[0], Plan) == (first == "plan")


def test_path_by_path_the_record_is_that_of_whole_blocks(tmp_path: Path) -> None:
    """Figures and verdicts are those of the kernel that takes all paths; how it was run is a remark."""
    one = audited(tmp_path, BUFFER, kernel=SINGLE).record
    block = audited(tmp_path, GEOMETRIC).record
    assert one.quantities == block.quantities
    assert one.verdict == block.verdict
    assert one.reach is not None
    assert block.reach is not None
    assert SAID in one.reach.remarks
    assert not block.reach.remarks
