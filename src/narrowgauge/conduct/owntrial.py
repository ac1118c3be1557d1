"""The trial of a kernel that rounds for itself: nothing is emulated, so there are no bits of plain NumPy to reproduce.

It is called twice in every arm and must give equal bits; shapes, parameters and targets must fit, and the reference
must be finite. Then the canary says whether it rounds in the formats it claims.
"""

from __future__ import annotations

import numpy as np

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.conduct.canary import MOST_STEPS, Canary
from narrowgauge.conduct.trial import FEW, NOT_REPEATABLE, PATHS, check_targets, same_bits, trial_levels
from narrowgauge.draws.coarsen import Draws
from narrowgauge.draws.streams import Purpose
from narrowgauge.errors import KernelError
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.contract import check_parameters
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.kernel.raised import kept_apart, raised, with_place
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.calls import Caller
from narrowgauge.record.audit import FaultEntry, TrialEntry

__all__ = ["examine_own"]


def examine_own(file: AuditFile, kernel: KernelSource, runner: BlockRunner) -> TrialEntry:
    """Run every arm twice on a small sample, then the canary.

    Raises KernelError where two runs differ in any bit, the reference is not finite or raises, or a result is of the
    wrong kind; AuditFileError where symbols, parameters or targets do not fit the kernel. What the kernel raises in a
    narrow arm is returned among the faults.
    """
    arms = [arm for arm in runner.arms if Arm.named(arm).exact]  # a format is tried once
    if kernel.foreign is not None:
        kernel.foreign.check(arms)
    callers: dict[str, Caller] = {}
    faults: list[FaultEntry] = []
    for arm in arms:
        kept = _tried(file, runner, callers, arm, checked=kernel.foreign is not None)
        if kept is not None:
            callers.pop(arm, None)
            faults.append(FaultEntry(arm=arm, kind="raised", message=str(raised(kept))))
    level = file.ladder.level_within(MOST_STEPS)
    canary = Canary(file, _drawn(runner, level, PATHS), level, callers).entries()
    return TrialEntry(identical=True, reach=None, range=None, canary=canary, faults=faults)


def _tried(
    file: AuditFile, runner: BlockRunner, callers: dict[str, Caller], arm: str, *, checked: bool
) -> BaseException | None:
    """Run one arm on every level of the trial; return what the kernel raises in a narrow one."""
    for level in trial_levels(file):
        with kept_apart(level, arm) as kept:
            if arm not in callers:
                callers[arm] = runner.caller(arithmetic_named(arm))
            if arm == REFERENCE and not checked:
                check_parameters(callers[arm].copy.function, file)
            _twice(file, runner, callers[arm], level, arm)
        if kept.problem is not None and arm == REFERENCE:
            raise raised(kept.problem, level, arm) from kept.problem
        if kept.problem is not None:
            return kept.problem
    return None


def _twice(file: AuditFile, runner: BlockRunner, caller: Caller, level: int, arm: str) -> None:
    """Run one arm twice on a level, and the reference on the finest level, on few paths."""
    first, second = (caller.fine(_drawn(runner, level, PATHS), level) for _ in range(2))
    for name in first | second:
        same_bits(name, first, second, level, NOT_REPEATABLE)
    if arm != REFERENCE:
        return
    for name, values in first.items():
        if not np.isfinite(values).all():
            path = int(np.argmin(np.isfinite(values)))
            what = f"the reference is not finite for {name!r}, first on path {path} with {float(values[path])!r}"
            raise KernelError(what, level=level, arm=arm)
    check_targets(file, list(first))
    if level == 0 and (finest := file.ladder.finest) > level:
        try:
            with with_place(finest, arm):
                caller.fine(_drawn(runner, finest, FEW), finest)
        except KernelError:  # perhaps a kernel that works on groups of paths
            with with_place(finest, arm):
                caller.fine(_drawn(runner, finest, PATHS), finest)


def _drawn(runner: BlockRunner, level: int, paths: int) -> Draws:
    draws = runner.draws(level, 0, Purpose.IDENTITY, paths)
    assert isinstance(draws, Draws)  # no kernel that rounds for itself draws for itself
    return draws
