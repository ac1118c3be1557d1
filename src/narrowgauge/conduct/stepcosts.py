"""Costs of a step from measured times of a kernel that rounds for itself: formats run in turns, and their medians.

They hold for the machine that measured them: half precision that a processor lacks is slower there than single.
"""

from __future__ import annotations

from collections.abc import Mapping
from statistics import median

import msgspec

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.conduct.canary import MOST_STEPS
from narrowgauge.draws.coarsen import Draws, fine_draws
from narrowgauge.draws.streams import Purpose
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.raised import kept_apart, raised
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.block import BlockRunner
from narrowgauge.record.costs import CostEntry

__all__ = ["step_costs", "with_costs"]

_PATHS = 8192
_RUNS = 11  # after one that nobody counts
_NANO = 1e9


def step_costs(file: AuditFile, runner: BlockRunner) -> dict[str, CostEntry]:
    """Return the cost of a step by format, from fine paths of the finest level of at most 64 steps.

    A format in which the kernel raises costs what float64 does; it is not going to be chosen.
    """
    level = file.ladder.level_within(MOST_STEPS)
    draws = runner.draws(level, 0, Purpose.TRIAL, min(_PATHS, runner.paths(level)))
    assert isinstance(draws, Draws)  # no kernel that rounds for itself draws for itself
    steps = draws.values.shape[0] * draws.values.shape[-1]
    arms = [arm for arm in runner.arms if Arm.named(arm).exact]  # a step costs the same with other draws
    drawn = {arm: fine_draws(draws, arithmetic_named(arm)) for arm in arms}
    callers = {arm: runner.caller(arithmetic_named(arm)) for arm in arms}
    times: dict[str, list[float]] = {arm: [] for arm in arms}
    for _ in range(1 + _RUNS):
        for arm, caller in callers.items():
            with kept_apart(level, arm) as kept:  # what it raises in a narrow arm is the measurement's to keep
                times[arm].append(caller.seconds(drawn[arm], level) / steps * _NANO)
            if kept.problem is not None and arm == REFERENCE:
                raise raised(kept.problem, level, arm) from kept.problem
    counted = {arm: found[1:] or times[REFERENCE][1:] for arm, found in times.items()}
    unit = median(counted[REFERENCE])
    return {
        arm: CostEntry(
            cost=median(found) / unit,
            nanoseconds=median(found),
            fastest=min(found),
            slowest=max(found),
            runs=len(found),
        )
        for arm, found in counted.items()
    }


def with_costs(file: AuditFile, costs: Mapping[str, CostEntry] | None) -> AuditFile:
    """Return the audit file with measured costs to judge by, if there are any."""
    if costs is None:
        return file
    timed = msgspec.structs.replace(file.cost, **{arm: one.cost for arm, one in costs.items()})
    return msgspec.structs.replace(file, timed=timed)
