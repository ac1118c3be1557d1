"""What a kernel that draws for itself draws, found out by running it: how much per step, and what belongs to a step.

Runs in plain NumPy that differ in steps, and two that differ in paths, are compared by their requests alone.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from narrowgauge.draws.layout import Layout, Request, draws_of, layouts
from narrowgauge.draws.streams import Purpose, UniformStream
from narrowgauge.draws.tape import Tape
from narrowgauge.errors import KernelError
from narrowgauge.kernel.auditfile import AuditFile, with_draws
from narrowgauge.kernel.contract import check_parameters
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.kernel.raised import with_place
from narrowgauge.measure.arms import PLAIN
from narrowgauge.measure.calls import Caller

__all__ = ["DrawPlan", "plan_draws", "worked_out"]

_PATHS = 1024
_SINGLE_PATHS = 128  # of a kernel that takes one path a call
_APART = 0.5  # of the quantity's variance; paths that share nothing differ by twice it
_CLOSE = 1e-2  # of it: paths that differ by less are close, whatever becomes of the difference
_SHARE_PATHS = 8192  # its variance is then known to a few per cent; of one path a call an eighth


@dataclass(frozen=True, slots=True, kw_only=True)
class DrawPlan:
    """Random numbers per path and step, rounded up, and their layout; None where the levels cannot be coupled.

    `one_path`: the kernel takes one path a call. `steady`: the requests follow from the steps, in number and kind.
    """

    factors: int
    layout: Layout | None
    remarks: tuple[str, ...]
    one_path: bool = False
    steady: bool = True


def worked_out(file: AuditFile, kernel: KernelSource) -> AuditFile:
    """Return the audit file with factors, and coupling where there can be none, as the kernel's requests show them.

    Any other kernel than one that draws for itself leaves the file as it is. Raises what `plan_draws` raises.
    """
    if file.kernel.takes != "rng":
        return file
    plan = plan_draws(file, kernel)
    return with_draws(file, plan.factors, file.kernel.coupling if plan.layout or not file.ladder.finest else "none")


def plan_draws(file: AuditFile, kernel: KernelSource) -> DrawPlan:
    """Run the kernel in plain NumPy on three levels and return what its requests show.

    Raises KernelError where the kernel raises on a level of the ladder, draws nothing, or lets all paths share their
    draws; AuditFileError where it cannot be called.
    """
    caller = Caller(file, kernel, None)
    check_parameters(caller.copy.function, file)
    paths = _SINGLE_PATHS if caller.one_path else _PATHS
    finest = file.ladder.finest
    levels = (1, 2, 3) if finest >= 3 else (0, 1, 2)
    remarks: list[str] = []
    runs: dict[int, list[Request]] = {}
    reason = ""
    for level in levels if finest or caller.one_path else (0,):
        try:
            runs[level] = _requests(caller, file, level, paths)
        except KernelError:
            if level <= finest:
                raise
            reason = f"the kernel does not run with {file.ladder.steps(level)} steps, which it is tried with"
    first = min(runs)
    grows = _growth(runs[first], _requests(caller, file, first, 2 * paths), paths=paths, level=first, remarks=remarks)
    factors = _factors(runs, file, paths)
    found: list[Layout] | str = []
    if len(runs) > 1 or reason:
        found = reason or grows or layouts({file.ladder.steps(level): requests for level, requests in runs.items()})
    steady = not isinstance(found, str)
    if not finest:
        return DrawPlan(factors=factors, layout=None, remarks=tuple(remarks), one_path=caller.one_path, steady=steady)
    layout = None if isinstance(found, str) else found[0]
    if isinstance(found, str):
        remarks.append(
            f"the levels are not coupled: {found}. Each level is measured and judged by itself, without differences "
            "between levels"
        )
    else:
        layout = _closest(found, caller, file, levels[1])
        remarks += _said_of(layout, [one for one in found if one.runs == 1])
        near, far = (_share(layout, caller, file, level) for level in (levels[2], max(levels[0], 1)))
        apart = f"the difference has {near:.2g} of the quantity's variance with {file.ladder.steps(levels[2])} steps"
        if near > _APART:
            layout = None
            remarks.append(
                f"the levels are not coupled: in no order of the draws are fine and coarse paths close, {apart}. "
                "Each level is measured and judged by itself, without differences between levels"
            )
        elif near > max(far, _CLOSE):
            remarks.append(
                f"fine and coarse paths draw no closer as the steps get finer, {apart}: a closer coupling would leave "
                "less signal for the rounding errors to be small against"
            )
    return DrawPlan(factors=factors, layout=layout, remarks=tuple(remarks), one_path=caller.one_path, steady=steady)


def _said_of(layout: Layout, usual: Sequence[Layout]) -> list[str]:
    """Return what is worth knowing about the choice of a layout."""
    if layout.runs > 1:
        return [
            f"the draws are taken as {layout.runs} passes over the steps, which brings fine and coarse paths closest"
        ]
    if len(usual) > 1:
        return [
            f"{len(usual)} layouts of the draws fit the kernel's requests; the one that brings fine and coarse paths "
            "closest is taken"
        ]
    return []


def _requests(caller: Caller, file: AuditFile, level: int, paths: int) -> list[Request]:
    """Return what one run in plain NumPy asks for."""
    tape = _tape(file, level, paths, None, caller.one_path)
    with with_place(level, PLAIN):
        caller.fine(tape, level)
    if not draws_of(tape.requests):
        raise KernelError(
            "the kernel draws no random numbers from rng or numpy.random; accepted: one that does, or another takes",
            level=level,
            arm=PLAIN,
        )
    return tape.requests


def _tape(file: AuditFile, level: int, paths: int, layout: Layout | None, singly: bool) -> Tape:
    stream = UniformStream(file.sampling.seed, Purpose.TRIAL, level, 0)
    steps, refinement = file.ladder.steps(level), file.ladder.refinement
    return Tape(stream, paths=paths, steps=steps, refinement=refinement, layout=layout, singly=singly)


def _growth(few: Sequence[Request], many: Sequence[Request], *, paths: int, level: int, remarks: list[str]) -> str:
    """Compare runs of `paths` and of twice as many; return what stands against a layout."""
    if draws_of(few) == draws_of(many):
        raise KernelError(
            f"the kernel draws {draws_of(few)} random numbers for {paths} paths and as many for {2 * paths}: its "
            "paths share them and are not independent; accepted: draws of its own for each path",
            level=level,
            arm=PLAIN,
        )
    if len(few) != len(many):
        return "the number of requests grows with the number of paths"
    shared = [one for one, other in zip(few, many, strict=True) if one.size == other.size]
    if shared:
        remarks.append(f"all paths of a block share a draw ({shared[0]}): intervals take paths for independent")
    fewer = [one for one in few if one not in shared and max(one.size, default=0) < paths]
    if fewer:
        remarks.append(
            f"paths share draws, or take them in parts: for {paths} paths the kernel asks for {fewer[0]}. Intervals "
            "take paths for independent, which antithetic ones are not"
        )
    return ""


def _factors(runs: dict[int, list[Request]], file: AuditFile, paths: int) -> int:
    """Return the random numbers per path and step, rounded up."""
    fine, coarse = max(runs), min(runs)
    steps, drawn = file.ladder.steps(fine), draws_of(runs[fine])
    if fine != coarse and drawn > draws_of(runs[coarse]):
        steps, drawn = steps - file.ladder.steps(coarse), drawn - draws_of(runs[coarse])
    return max(1, math.ceil(drawn / (steps * paths)))


def _closest(found: Sequence[Layout], caller: Caller, file: AuditFile, level: int) -> Layout:
    """Return the layout with the smallest variance of the level difference, as a share, in plain NumPy."""
    if len(found) == 1:
        return found[0]
    return min(found, key=lambda layout: _share(layout, caller, file, level))


def _share(layout: Layout, caller: Caller, file: AuditFile, level: int) -> float:
    """Return Var D / Var P on one level, the mean over quantities; infinite where the layout does not fit."""
    paths = _SHARE_PATHS // 8 if caller.one_path else _SHARE_PATHS
    tape = _tape(file, level, paths, layout, caller.one_path)
    try:
        fine, coarse = caller.fine(tape, level), caller.coarse(tape, level)
    except KernelError:  # the coarse run asks for other draws than this layout has
        return math.inf
    with np.errstate(all="ignore"):
        parts = [np.var(fine[name] - coarse[name]) / np.var(fine[name]) for name in fine if name in coarse]
    return float(np.mean(np.nan_to_num(parts, nan=0.0, posinf=math.inf)))  # a quantity that is constant has no say
