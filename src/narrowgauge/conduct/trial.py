"""The identity run, and the trial of every arm: what is rounded, and what would escape.

Before anything is measured the kernel runs once under float64 through the whole machinery and must give plain NumPy's
bits: what differs went a way of its own.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.conduct.observers import Constants, Notes
from narrowgauge.conduct.reached import most_of, range_entry, reach_entry, text_remarks
from narrowgauge.draws.coarsen import Draws
from narrowgauge.draws.streams import Purpose
from narrowgauge.draws.tape import Tape
from narrowgauge.errors import AuditFileError, DispatchError, KernelError
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.contract import check_parameters
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.kernel.raised import kept_apart, raised, with_place
from narrowgauge.measure.arms import PLAIN, REFERENCE
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.calls import Quantities
from narrowgauge.record.audit import FaultEntry, TrialEntry

__all__ = [
    "FEW",
    "NOT_IDENTICAL",
    "NOT_REPEATABLE",
    "PATHS",
    "check_targets",
    "examine",
    "same_bits",
    "trial_levels",
    "try_arms",
]

PATHS = 1024
FEW = 8  # paths on the finest level, which may have thousands of steps; what is met there does not depend on them
_LEVEL = 2  # coarse enough to be over at once, fine enough to pass through the time loop more than once
NOT_REPEATABLE = (
    "a second call with the same draws does not give the same bits",
    "The kernel is not a function of its draws alone; accepted: a kernel whose calls leave nothing behind",
)
NOT_IDENTICAL = (
    "float64 through the emulation does not give plain NumPy's bits",
    "Either the kernel is not a function of its draws alone, or an operation of it is not emulated rightly",
)


class _Trial:
    """The runs of one trial, and what was noted of them."""

    def __init__(self, file: AuditFile, kernel: KernelSource, runner: BlockRunner) -> None:
        self._file, self._kernel, self._runner = file, kernel, runner
        self.levels = trial_levels(file)
        self._draws: dict[int, Draws | Tape] = {}
        self._reference: dict[int, Notes] = {}
        self._narrow: dict[str, dict[int, Notes]] = {}
        self._finest: Notes | None = None
        self._remarks: list[str] = []
        self.arms = [name for name in runner.arms[1:] if Arm.named(name).exact]  # a format is tried once

    def identity(self) -> None:
        """Run the kernel under plain NumPy and under float64 through the whole machinery, on each level.

        The finest level is run on few paths, since the step sizes there are constants too. Raises what `examine`
        says of the reference.
        """
        self._remark(self._runner.remarks)
        for level in self.levels:
            notes = self._reference[level] = Notes(self.arms)  # kept also where the run stops halfway
            self._remark(_identical(self._file, self._runner, self._drawn(level), level, notes))
        if self._file.ladder.finest not in self.levels:
            self._finest = self._noted_on_finest()

    def arm(self, arm: str, level: int) -> FaultEntry | None:
        """Run one arm on one level, on the reference's draws; what the kernel raises is returned.

        Raises DispatchError for an escape, KernelError for a result of the wrong kind and for want of memory or files.
        """
        notes = Notes([arm])
        draws = self._drawn(level)
        if isinstance(draws, Tape) and not draws.closed:
            _plainly_twice(self._file, self._runner, draws, level)  # writes what the arm has to ask for
        with kept_apart(level, arm) as kept:
            self._runner.caller(arithmetic_named(arm), notes).fine(draws, level)
        if kept.problem is not None:
            return FaultEntry(arm=arm, kind="raised", message=str(raised(kept.problem)))
        self._narrow.setdefault(arm, {})[level] = notes
        return None

    def entry(self, *, identical: bool, faults: list[FaultEntry]) -> TrialEntry:
        """Return all that the runs showed; without a reference nothing was reached."""
        file, main = self._file, self.levels[0]
        references = [*self._reference.values(), *([] if self._finest is None else [self._finest])]
        narrow = [notes for levels in self._narrow.values() for notes in levels.values()]
        reference = self._reference.get(main, Notes(self.arms))
        compared = {arm: levels[main] for arm, levels in self._narrow.items() if main in levels}
        runs = [*references, *narrow]
        remarks = [*self._remarks, *text_remarks(file, runs), *self._unused(runs)]
        constants = Constants(self.arms)
        for notes in references:
            constants.add(notes.constants)
        for arm in self._narrow:
            own = Constants(self.arms)
            for notes in self._narrow[arm].values():
                own.add(notes.constants)
            constants.fill_in(own)
        return TrialEntry(
            identical=identical,
            reach=reach_entry(file, reference, compared if identical else {}, runs, remarks),
            range=range_entry(file, constants, self.arms) if identical else None,
            faults=faults,
        )

    def _drawn(self, level: int) -> Draws | Tape:
        if level not in self._draws:
            self._draws[level] = self._runner.draws(level, 0, Purpose.IDENTITY, PATHS)
        return self._draws[level]

    def _noted_on_finest(self) -> Notes:
        """Run the reference on the finest level: on few paths, or on as many as a block has where those do not do."""
        level = self._file.ladder.finest
        for paths in (FEW, PATHS):
            notes = Notes(self.arms)
            try:
                draws = self._runner.draws(level, 0, Purpose.IDENTITY, paths)
                _identical(self._file, self._runner, draws, level, notes)
                break
            except (KernelError, DispatchError):  # perhaps a kernel that works on groups of paths
                if paths == PATHS or self._runner.singly:
                    raise
        return notes

    def _remark(self, texts: Iterable[str]) -> None:
        self._remarks += [text for text in texts if text not in self._remarks]

    def _unused(self, runs: Sequence[Notes]) -> list[str]:
        """Say which lines of kernel.allow let nothing out."""
        found = {place.resolved() for place in most_of(runs, "escape") if place is not None}
        return [
            f"kernel.allow: nothing escaped at {entry}"
            for entry, place in self._kernel.allowed.items()
            if place not in found
        ]


def examine(file: AuditFile, kernel: KernelSource, runner: BlockRunner) -> TrialEntry:
    """Run the identity run, and every narrow arm once on a small sample, before anything is measured.

    Raises KernelError where the results of plain NumPy and of float64 through the machinery differ in any bit, or those
    of a repeated run, or where the kernel raises in one of them; EscapeError or RefusedError, with level and arm where
    it is a narrow one; AuditFileError where parameters or targets do not fit the kernel. What the kernel raises in a
    narrow arm is left to the measurement.
    """
    trial = _Trial(file, kernel, runner)
    trial.identity()
    for arm in trial.arms:
        for level in trial.levels:
            try:
                fault = trial.arm(arm, level)
            except DispatchError as problem:
                raise type(problem)(f"level {level}, arm {arm}: {problem}") from None
            if fault is not None:
                break
    return trial.entry(identical=True, faults=[])


def try_arms(file: AuditFile, kernel: KernelSource, runner: BlockRunner) -> TrialEntry:
    """Run the same and return what would be rounded and escape, with what stops the reference or a narrow arm."""
    trial = _Trial(file, kernel, runner)
    faults = []
    try:
        trial.identity()
    except DispatchError as problem:
        faults.append(FaultEntry(arm=REFERENCE, kind="escape", message=str(problem)))
    identical = not faults
    for arm in trial.arms:
        for level in trial.levels:
            try:
                fault = trial.arm(arm, level)
            except DispatchError as problem:
                fault = FaultEntry(arm=arm, kind="escape", message=str(problem))
            if fault is not None:
                faults.append(fault)
                break
    return trial.entry(identical=identical, faults=faults)


def trial_levels(file: AuditFile) -> list[int]:
    """Return the levels of a trial: one whose time loop is passed through more than once, then the coarsest."""
    return sorted({min(_LEVEL, file.ladder.finest), 0}, reverse=True)


def _identical(file: AuditFile, runner: BlockRunner, draws: Draws | Tape, level: int, notes: Notes) -> list[str]:
    """Raise unless plain NumPy, plain NumPy again and float64 through the machinery give the same bits.

    Returns what there is to say about the kernel's random numbers and about the modules that it used.
    """
    plain, repeated = _plainly_twice(file, runner, draws, level)
    with with_place(level, REFERENCE, but=", where plain NumPy does not"):
        caller = runner.caller(arithmetic_named(REFERENCE), notes)
        with_machinery = caller.fine(draws, level)
    for name in plain | repeated:
        same_bits(name, plain, repeated, level, NOT_REPEATABLE)
    for name in plain | with_machinery:
        same_bits(name, plain, with_machinery, level, NOT_IDENTICAL)
    check_targets(file, list(plain))
    found = [f"{file.shown(place.file)}:{place.line}: {text}" if place else text for place, text in caller.remarks]
    found += [f"the module {name} is shared: it was imported as it is and not rounded" for name in caller.copy.shared]
    return found + [f"{name} is compiled: it ran as the Python function underneath" for name in caller.copy.compiled]


def _plainly_twice(
    file: AuditFile, runner: BlockRunner, draws: Draws | Tape, level: int
) -> tuple[Quantities, Quantities]:
    """Run the kernel twice under plain NumPy; what it raises is a KernelError with the kernel's own as its cause."""
    with with_place(level, PLAIN):
        caller = runner.caller(None)
        check_parameters(caller.copy.function, file)
        first = caller.fine(draws, level)
        return first, caller.fine(draws, level)


def check_targets(file: AuditFile, quantities: list[str]) -> None:
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


def same_bits(name: str, plain: Quantities, other: Quantities, level: int, words: tuple[str, str]) -> None:
    """Raise KernelError, in these `words`, unless two runs give a quantity the same bits; NaN is NaN."""
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
