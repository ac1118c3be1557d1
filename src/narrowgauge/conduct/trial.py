"""The identity run, and the trial of every arm: what is rounded, and what would escape.

Before anything is measured the kernel runs once under float64 through the whole machinery and must give plain NumPy's
bits: what differs went a way of its own.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from typing import Any

import numpy as np

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.setting import Place, Route, Setting
from narrowgauge.draws.coarsen import Draws
from narrowgauge.draws.streams import Purpose
from narrowgauge.draws.tape import Tape
from narrowgauge.errors import AuditFileError, DispatchError, KernelError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.contract import check_parameters
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.calls import Caller, Quantities
from narrowgauge.record.audit import FaultEntry, ReachEntry, ReachLine, TrialEntry

__all__ = ["identity_run", "try_arms"]

_PATHS = 1024
_LEVEL = 2  # coarse enough to be over at once, fine enough to pass through the time loop more than once
_NOT_REPEATABLE = (
    "a second call with the same draws does not give the same bits",
    "The kernel is not a function of its draws alone; accepted: a kernel whose calls leave nothing behind",
)
_NOT_IDENTICAL = (
    "float64 through the emulation does not give plain NumPy's bits",
    "Either the kernel is not a function of its draws alone, or an operation of it is not emulated rightly",
)


class _Count:
    """An observer that counts operations by line, and the decisions of the control flow."""

    def __init__(self) -> None:
        self.operations: Counter[tuple[Place | None, str, Route]] = Counter()
        self.decisions = 0

    def saw(self, setting: Setting, operation: str, route: Route, operands: Sequence[Any], result: Any) -> None:
        """Count one operation."""
        self.operations[setting.where(), operation, route] += 1

    def decided(self, setting: Setting) -> None:
        """Count one decision."""
        self.decisions += 1


def identity_run(file: AuditFile, kernel: KernelSource, runner: BlockRunner) -> ReachEntry:
    """Run the kernel under plain NumPy and under float64 through the whole machinery; return what the latter reached.

    Raises KernelError where the results differ in any bit, of these two runs or of a repeated one, or the kernel
    raises, and what the machinery refuses; AuditFileError where parameters or targets do not fit the kernel.
    """
    counts = []
    remarks = list(runner.remarks)
    for level in _levels(file):
        counts.append(_Count())
        met = _identical(file, kernel, runner.draws(level, 0, Purpose.IDENTITY, _PATHS), level, counts[-1])
        remarks += [one for one in met if one not in remarks]
    return _reach(counts[0], file, remarks)


def _levels(file: AuditFile) -> list[int]:
    """Return the levels of a trial: one whose time loop is passed through more than once, then the coarsest."""
    return sorted({min(_LEVEL, file.ladder.finest), 0}, reverse=True)


def _identical(file: AuditFile, kernel: KernelSource, draws: Draws | Tape, level: int, count: _Count) -> list[str]:
    """Raise unless plain NumPy, plain NumPy again and float64 through the machinery give the same bits.

    Returns what there is to say about the kernel's random numbers and about the modules that it used.
    """
    plain, repeated = _plainly_twice(file, kernel, draws, level)
    try:
        caller = Caller(file, kernel, arithmetic_named(REFERENCE), count)
        with_machinery = caller.fine(draws, level)
    except DispatchError:
        raise
    except KernelError as problem:
        raise KernelError(str(problem), level=level, arm=REFERENCE) from problem.__cause__
    except KeyboardInterrupt:
        raise
    except BaseException as problem:  # plain NumPy did not raise
        what = f"the kernel raised {type(problem).__name__}: {problem}, where plain NumPy does not"
        raise KernelError(what, level=level, arm=REFERENCE) from problem
    for name in plain | repeated:
        _same_bits(name, plain, repeated, level, _NOT_REPEATABLE)
    for name in plain | with_machinery:
        _same_bits(name, plain, with_machinery, level, _NOT_IDENTICAL)
    _check_targets(file, list(plain))
    said = [f"{file.shown(place.file)}:{place.line}: {text}" if place else text for place, text in caller.remarks]
    said += [f"the module {name} is shared: it was imported as it is and not rounded" for name in caller.copy.shared]
    return said + [f"{name} is compiled: it ran as the Python function underneath" for name in caller.copy.compiled]


def try_arms(file: AuditFile, kernel: KernelSource, runner: BlockRunner) -> TrialEntry:
    """Run the identity run and every narrow arm once on a small sample; return what would be rounded and escape."""
    faults = []
    identical = True
    reach = ReachEntry(operations=0, rounded=0, share=None, decisions=0, lines=[], remarks=[])
    try:
        reach = identity_run(file, kernel, runner)
    except DispatchError as problem:
        identical = False
        faults.append(FaultEntry(arm=REFERENCE, kind="escape", message=str(problem)))
    for arm in runner.arms[1:]:
        for level in _levels(file):
            fault = _fault(file, kernel, runner.draws(level, 0, Purpose.IDENTITY, _PATHS), level, arm)
            if fault is not None:
                faults.append(fault)
                break
    return TrialEntry(identical=identical, reach=reach, faults=faults)


def _fault(file: AuditFile, kernel: KernelSource, draws: Draws | Tape, level: int, arm: str) -> FaultEntry | None:
    """Run one arm on one level and return what stops it, or None."""
    if isinstance(draws, Tape):
        _plainly_twice(file, kernel, draws, level)  # writes what the arm has to ask for
    try:
        Caller(file, kernel, arithmetic_named(arm)).fine(draws, level)
    except DispatchError as problem:
        return FaultEntry(arm=arm, kind="escape", message=str(problem))
    except KernelError as problem:
        raise KernelError(str(problem), level=level, arm=arm) from problem.__cause__
    except KeyboardInterrupt:
        raise
    except BaseException as problem:  # the audit itself keeps what a narrow arm raises as data
        what = f"the kernel raised {type(problem).__name__}: {problem}"
        return FaultEntry(arm=arm, kind="raised", message=what)
    return None


def _plainly_twice(
    file: AuditFile, kernel: KernelSource, draws: Draws | Tape, level: int
) -> tuple[Quantities, Quantities]:
    """Run the kernel twice under plain NumPy; what it raises is a KernelError with the kernel's own as its cause."""
    arm = "plain NumPy"
    try:
        caller = Caller(file, kernel, None)
        check_parameters(caller.copy.function, file)
        first = caller.fine(draws, level)
        return first, caller.fine(draws, level)
    except KernelError as problem:
        raise KernelError(str(problem), level=level, arm=arm) from problem.__cause__
    except (AuditFileError, DispatchError):  # no such function, other parameters, or draws that are not offered
        raise
    except KeyboardInterrupt:
        raise
    except BaseException as problem:  # the reference: its own traceback is shown
        what = f"the kernel raised {type(problem).__name__}: {problem}"
        raise KernelError(what, level=level, arm=arm) from problem


def _check_targets(file: AuditFile, quantities: list[str]) -> None:
    """Raise AuditFileError unless the target names the quantities that the kernel returns."""
    if file.target is None:
        return
    names = ", ".join(quantities)
    for key in ("rmse", "largest_correction"):
        figures = getattr(file.target, key)
        for name in figures if isinstance(figures, dict) else ():
            if name not in quantities:
                where = f"target.{key}.{name}"
                raise AuditFileError(file.source, where, "the kernel returns no such quantity", names)
    rmse = file.target.rmse
    accepted = f"a table with a number for each of {names}"
    if isinstance(rmse, dict):
        missing = [name for name in quantities if name not in rmse]
        if missing:
            raise AuditFileError(file.source, "target.rmse", f"no number for {missing[0]}", accepted)
    elif len(quantities) > 1:
        raise AuditFileError(file.source, "target.rmse", f"one number for {len(quantities)} quantities", accepted)


def _same_bits(name: str, plain: Quantities, other: Quantities, level: int, words: tuple[str, str]) -> None:
    if name not in plain or name not in other:
        raise KernelError(f"the quantity {name!r} is returned in one of two runs only", level=level)
    here, there = plain[name], other[name]
    differs = (here.view(np.int64) != there.view(np.int64)) & ~(np.isnan(here) & np.isnan(there))
    if not differs.any():
        return
    first, (what, reason) = int(np.argmax(differs)), words
    raise KernelError(
        f"{what} for {name!r}: {int(differs.sum())} of {here.size} paths differ, the first is path {first} with "
        f"{float(there[first])!r} for {float(here[first])!r}. {reason}",
        level=level,
    )


def _reach(count: _Count, file: AuditFile, remarks: list[str]) -> ReachEntry:
    lines = [
        ReachLine(
            file=file.shown(place.file) if place else None,
            line=place.line if place else None,
            operation=operation,
            route=route,
            count=number,
        )
        for (place, operation, route), number in sorted(count.operations.items(), key=lambda item: _order(item[0]))
    ]
    # A sum in a stated order rounds each partial result.
    rounded = sum(line.count for line in lines if line.route in ("rounded", "accumulated"))
    whole = sum(line.count for line in lines if line.route == "whole")
    return ReachEntry(
        operations=sum(line.count for line in lines),
        rounded=rounded,
        share=rounded / (rounded + whole) if rounded + whole else None,
        decisions=count.decisions,
        lines=lines,
        remarks=remarks,
    )


def _order(key: tuple[Place | None, str, Route]) -> tuple[str, int, str]:
    place, operation, _ = key
    return (place.file, place.line, operation) if place else ("", 0, operation)
