"""The run on a few paths that looks at every number: the part of the record on range and lost additions."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import TypedDict

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import Arithmetic, arithmetic_named
from narrowgauge.arithmetic.formats import Format
from narrowgauge.arithmetic.indouble import InDouble
from narrowgauge.conduct.entries import finite
from narrowgauge.conduct.rangewatch import LineSeen, Nonfinite, RangeWatch, Seen
from narrowgauge.dispatch.setting import Place
from narrowgauge.draws.coarsen import Draws
from narrowgauge.draws.streams import GRAIN, Purpose
from narrowgauge.draws.tape import Tape
from narrowgauge.errors import DispatchError, KernelError, said
from narrowgauge.judge.range import centring_shift, exponent, headroom, share_by_path
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.raised import kept_apart
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.calls import Caller, Quantities
from narrowgauge.record.range import (
    LineArmEntry,
    LineRangeEntry,
    NonfiniteEntry,
    RangeLevelEntry,
    ShareEntry,
    ShiftEntry,
    ShiftLevelEntry,
    WatchedArmEntry,
    WatchedEntry,
)

__all__ = ["PATHS", "watched_levels", "watched_range"]

PATHS = 256
_PATHS_SINGLY = 32  # of a kernel that is called for one at a time
_MOST_STEPS = 1024  # of the finest level: looking at an operation costs a fixed time, however few the paths

Doubles = npt.NDArray[np.float64]
_Line = tuple[Place | None, str]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Run:
    """One arm on one level; `values` is None where something stopped it, which `stopped` says."""

    seen: Seen
    values: Quantities | None
    stopped: str | None


def watched_levels(file: AuditFile) -> list[int]:
    """Return the coarsest, a middle and the finest level of at most 1,024 steps."""
    top = file.ladder.level_within(_MOST_STEPS)
    return sorted({0, (top + 1) // 2, top})


def watched_range(file: AuditFile, runner: BlockRunner) -> WatchedEntry:
    """Run every arm with exact draws on a few paths of some levels, and look at every operation.

    A level on which the reference does not come to its end is left out: whatever stops it will stop the measurement,
    and be told there. The draws are those of the trial.
    """
    arms = [name for name in runner.arms if Arm.named(name).exact]
    watched = {name: _Watched(file, runner, arithmetic_named(name), Arm.named(name).form) for name in arms}
    runs: dict[int, dict[str, _Run]] = {}
    for level in watched_levels(file):
        for paths in (_PATHS_SINGLY,) if runner.singly else (PATHS, GRAIN):  # a kernel may work on groups of paths
            reference = watched[REFERENCE].run(level, paths)
            if reference.values is not None:
                narrow = {name: watched[name].run(level, paths) for name in arms if name != REFERENCE}
                runs[level] = {REFERENCE: reference, **narrow}
                break
    shifts = {}
    for name in arms:
        if name != REFERENCE and (shift := _shift(Arm.named(name).form, name, runs)):
            shifts[name] = _shift_entry(file, runner, name, shift, runs)
    alpha = 1 - file.sampling.confidence
    return WatchedEntry(
        confidence=file.sampling.confidence,
        levels=[_level_entry(file, level, arms_of_level, alpha) for level, arms_of_level in runs.items()],
        shifts=shifts,
    )


class _Watched:
    """One arm with its private copy of the kernel, and the watch that sees all that it does."""

    def __init__(self, file: AuditFile, runner: BlockRunner, arithmetic: Arithmetic, form: Format) -> None:
        self._file, self._runner = file, runner
        self._arithmetic, self._form = arithmetic, form
        self._caller: Caller | None = None
        self._watch = RangeWatch(form)

    def run(self, level: int, paths: int) -> _Run:
        """Run fine paths of a level."""
        parts: list[Quantities] = []
        watch = self._watch
        stopped = _stopped(level, self._form.name, lambda: parts.extend(self._calls(level, paths)))
        values = None
        if stopped is None:
            values = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
        return _Run(seen=watch.harvest(), values=values, stopped=stopped)

    def _calls(self, level: int, paths: int) -> Iterator[Quantities]:
        runner, watch = self._runner, self._watch
        if self._caller is None:
            self._caller = runner.caller(self._arithmetic, watch)
        if runner.singly:
            watch.expect(paths)
            for path in range(paths):  # each with a block of its own, so that its steps are counted from the first on
                watch.begin(path)
                yield self._caller.fine(self._draws(level, path, 1), level)
            return
        draws = self._draws(level, 0, paths)
        watch.expect(draws.paths if isinstance(draws, Tape) else draws.values.shape[-1])
        watch.begin()
        yield self._caller.fine(draws, level)

    def _draws(self, level: int, block: int, paths: int) -> Draws | Tape:
        return self._runner.draws(level, block, Purpose.IDENTITY, paths)


def _stopped(level: int, arm: str, run: Callable[[], object]) -> str | None:
    """Run something, and return what stopped it, in words."""
    try:
        with kept_apart(level, arm) as kept:
            run()
    except (DispatchError, KernelError) as problem:
        return said(problem)
    return None if kept.problem is None else f"the kernel raised {type(kept.problem).__name__}: {said(kept.problem)}"


def _shift(form: Format, arm: str, runs: Mapping[int, Mapping[str, _Run]]) -> int:
    """Return the shift that would centre an arm some of whose results pass an end of its range; 0 for none."""
    seen = [line for level in runs.values() for line in level[arm].seen.lines.values()]
    if not any(line.overflows or line.subnormals or line.underflows for line in seen):
        return 0
    met = [level[REFERENCE].seen for level in runs.values()]
    lines = [line for one in met for line in one.lines.values()]
    smallest = min((line.smallest for line in lines), default=0.0)
    largest = max([line.largest for line in lines] + [one.largest_met for one in met])
    return centring_shift(form, smallest, largest) if 0.0 < smallest <= largest else 0


def _shift_entry(
    file: AuditFile, runner: BlockRunner, arm: str, shift: int, runs: Mapping[int, Mapping[str, _Run]]
) -> ShiftEntry:
    """Run an arm with its exponents shifted on the same draws, and return what that changes."""
    form = Arm.named(arm).form.shifted(shift)
    watched = _Watched(file, runner, InDouble(form), form)
    levels: list[ShiftLevelEntry] = []
    for level, arms in runs.items():
        reference = arms[REFERENCE].values
        assert reference is not None  # or the level would not be there
        run = watched.run(level, next(iter(reference.values())).size)
        if run.stopped is not None:
            return ShiftEntry(exponent=shift, levels=levels, stopped=run.stopped)
        before, after = (_totals(one.seen) for one in (arms[arm], run))
        levels.append(
            ShiftLevelEntry(
                level=level,
                overflows=before.overflows,
                subnormals=before.subnormals,
                underflows=before.underflows,
                error_variance=_error_variance(arms[arm].values, reference),
                shifted_overflows=after.overflows,
                shifted_subnormals=after.subnormals,
                shifted_underflows=after.underflows,
                shifted_error_variance=_error_variance(run.values, reference),
            )
        )
    return ShiftEntry(exponent=shift, levels=levels, stopped=None)


def _error_variance(values: Quantities | None, reference: Quantities) -> dict[str, float | None]:
    """Return the variance of the error of each quantity; None where it is not finite, or nothing came of the run."""
    with np.errstate(all="ignore"):
        return {
            name: None if values is None else finite(float(np.var(values[name] - own, ddof=1)))
            for name, own in reference.items()
            if values is None or name in values
        }


def _totals(seen: Seen) -> LineSeen:
    total = LineSeen()
    for line in seen.lines.values():
        total.add(line)
    return total


def _level_entry(file: AuditFile, level: int, runs: Mapping[str, _Run], alpha: float) -> RangeLevelEntry:
    narrow = {arm: run for arm, run in runs.items() if arm != REFERENCE}
    lines: dict[_Line, None] = dict.fromkeys(line for run in runs.values() for line in run.seen.lines)
    return RangeLevelEntry(
        level=level,
        steps=file.ladder.steps(level),
        paths=runs[REFERENCE].seen.lost.size,
        arms={arm: _arm_entry(file, run, alpha) for arm, run in narrow.items()},
        lines=[_line_entry(file, line, runs[REFERENCE], narrow) for line in sorted(lines, key=_order)],
    )


def _arm_entry(file: AuditFile, run: _Run, alpha: float) -> WatchedArmEntry:
    seen, total = run.seen, _totals(run.seen)
    below = total.subnormals + total.underflows
    return WatchedArmEntry(
        lost=_share_entry(total.lost, total.additions, seen.lost, alpha),
        below=_share_entry(below, total.results, seen.below, alpha),
        overflows=total.overflows,
        first_nonfinite=None if seen.first is None else _nonfinite_entry(file, seen.first),
        stopped=run.stopped,
    )


def _share_entry(count: int, trials: int, by_path: Doubles, alpha: float) -> ShareEntry:
    share = share_by_path(by_path, trials / by_path.size if by_path.size else 0.0, alpha)
    return ShareEntry(
        count=count,
        of=trials,
        share=None if share is None else share.estimate,
        share_low=None if share is None else share.low,
        share_high=None if share is None else share.high,
    )


def _nonfinite_entry(file: AuditFile, first: Nonfinite) -> NonfiniteEntry:
    return NonfiniteEntry(
        **_place(file, first.place),
        operation=first.operation,
        kind=first.kind,
        step=first.step,
        path=first.path,
        operands=list(first.operands),
    )


def _line_entry(file: AuditFile, line: _Line, reference: _Run, narrow: Mapping[str, _Run]) -> LineRangeEntry:
    place, operation = line
    seen = reference.seen.lines.get(line)
    own = {arm: run.seen.lines.get(line) for arm, run in narrow.items()}
    known = seen if seen is not None and seen.largest else None
    first = seen or next(one for one in own.values() if one is not None)
    return LineRangeEntry(
        **_place(file, place),
        operation=operation,
        results=first.results,
        smallest=None if known is None else exponent(known.smallest),
        largest=None if known is None else exponent(known.largest),
        arms={arm: _line_arm_entry(Arm.named(arm).form, one, known) for arm, one in own.items() if one is not None},
    )


def _line_arm_entry(form: Format, seen: LineSeen, reference: LineSeen | None) -> LineArmEntry:
    room = None if reference is None else headroom(form, reference.smallest, reference.largest)
    return LineArmEntry(
        headroom_above=None if room is None else room.above,
        headroom_below=None if room is None else room.below,
        overflows=seen.overflows,
        subnormals=seen.subnormals,
        underflows=seen.underflows,
        additions=seen.additions,
        lost=seen.lost,
        first_lost=seen.first_lost,
        cancelled_mean=seen.bits / seen.additions if seen.additions else None,
        cancelled_most=seen.most_bits if seen.additions else None,
    )


class _Where(TypedDict):
    file: str | None
    line: int | None


def _place(file: AuditFile, place: Place | None) -> _Where:
    if place is None:
        return {"file": None, "line": None}
    return {"file": file.shown(place.file), "line": place.line}


def _order(line: _Line) -> tuple[str, int, str]:
    place, operation = line
    return (place.file, place.line, operation) if place else ("", 0, operation)
