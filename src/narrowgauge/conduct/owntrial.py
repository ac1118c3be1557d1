"""The trial of a kernel that rounds for itself: nothing is emulated, so there are no bits of plain NumPy to reproduce.

It is called twice in every arm and must give equal bits; shapes, parameters and targets must fit, and the reference
must be finite. Then the canary says whether it rounds in the formats it claims.
"""

from __future__ import annotations

import numpy as np

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.conduct.canary import Canary, canary_level
from narrowgauge.conduct.trial import NOT_REPEATABLE, check_targets, same_bits, trial_levels
from narrowgauge.draws.coarsen import Draws
from narrowgauge.draws.streams import Purpose
from narrowgauge.errors import AuditFileError, DispatchError, KernelError
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.contract import check_parameters
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.calls import Caller, Quantities
from narrowgauge.record.audit import FaultEntry, TrialEntry

__all__ = ["examine_own"]

_PATHS = 1024
_FEW = 8  # on the finest level


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
        try:
            callers[arm] = runner.caller(arithmetic_named(arm))
            if arm == REFERENCE and kernel.foreign is None:
                check_parameters(callers[arm].copy.function, file)
            for level in trial_levels(file):
                _twice(file, runner, callers[arm], level, arm)
        except (KernelError, DispatchError, AuditFileError, KeyboardInterrupt):
            raise
        except BaseException as problem:  # the audit itself keeps what a narrow arm raises as data
            callers.pop(arm, None)
            what = f"the kernel raised {type(problem).__name__}: {problem}"
            faults.append(FaultEntry(arm=arm, kind="raised", message=what))
    level = canary_level(file)
    canary = Canary(file, _drawn(runner, level, _PATHS), level, callers).entries()
    return TrialEntry(identical=True, reach=None, range=None, canary=canary, faults=faults)


def _twice(file: AuditFile, runner: BlockRunner, caller: Caller, level: int, arm: str) -> None:
    """Run one arm twice on a level, and the reference on the finest level, on few paths."""
    first, second = _run(runner, caller, level, arm), _run(runner, caller, level, arm)
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
            _run(runner, caller, finest, arm, _FEW)
        except KernelError:  # perhaps a kernel that works on groups of paths
            _run(runner, caller, finest, arm)


def _run(runner: BlockRunner, caller: Caller, level: int, arm: str, paths: int = _PATHS) -> Quantities:
    try:
        return caller.fine(_drawn(runner, level, paths), level)
    except KernelError as problem:
        raise KernelError(str(problem), level=level, arm=arm) from problem.__cause__
    except KeyboardInterrupt:
        raise
    except BaseException as problem:  # the kernel's own: in the reference its traceback is shown
        if arm != REFERENCE:
            raise
        what = f"the kernel raised {type(problem).__name__}: {problem}"
        raise KernelError(what, level=level, arm=arm) from problem


def _drawn(runner: BlockRunner, level: int, paths: int) -> Draws:
    draws = runner.draws(level, 0, Purpose.IDENTITY, paths)
    assert isinstance(draws, Draws)  # no kernel that rounds for itself draws for itself
    return draws
