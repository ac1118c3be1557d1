"""Runs in which lines have formats of their own, on the draws of one block: errors by run, and arms to be judged."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence, Set
from dataclasses import dataclass

import numpy as np

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.dispatch.byline import ByLine, Widths
from narrowgauge.dispatch.setting import Observer, Place
from narrowgauge.draws.streams import Purpose
from narrowgauge.kernel.arms import wider
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.kernel.raised import with_place
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.calls import Caller, Quantities
from narrowgauge.measure.moments import Series
from narrowgauge.measure.tally import LevelTally, Raised

__all__ = ["Errors", "LineRunner", "Run", "Variant"]

Lasting = Set[tuple[Place | None, float]]
_NOTHING = "nothing rounded"


@dataclass(frozen=True, slots=True, kw_only=True)
class Errors:
    """Error and correction of one quantity in one run, against the run in which nothing is rounded. Adds with `+`.

    `correction` is the error of the level difference, None on a level without a coarse path.
    """

    error: Series
    correction: Series | None

    def __add__(self, other: Errors) -> Errors:
        """Merge with further paths."""
        both = self.correction is not None and other.correction is not None
        return Errors(
            error=self.error + other.error,
            correction=self.correction + other.correction if both else None,  # type: ignore[operator]  # both are there
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Variant:
    """A way to compute a narrow format: its arithmetic, made `anew` for each level and block, or once for all."""

    make: Callable[[int, int], Arithmetic]
    anew: bool = False


Run = Widths | Variant


class LineRunner(BlockRunner):
    """Runs blocks of a level under `Widths`; each of them keeps a private copy of the kernel.

    Blocks are those of a purpose of their own: what is chosen by the audit's own paths is not measured on them.
    """

    def __init__(self, file: AuditFile, kernel: KernelSource, form: str, *, beside: BlockRunner | None = None) -> None:
        """Judge the arm `form`; what a runner `beside` has found out about the kernel is not asked again."""
        super().__init__(file, kernel)
        if beside is not None:
            self._plan, self._rows = beside._plan, beside._rows
        self._form = form
        self.lasting: Lasting | None = None

    def caller_of(self, widths: Widths, observer: Observer | None = None) -> Caller:
        """Return a private copy of the kernel that computes by line."""
        arithmetic = ByLine(widths, self.lasting)
        return Caller(self._file, self._kernel, arithmetic, observer, rows=not self.singly, drawn=widths.drawn())

    def observed(self, level: int, paths: int, observer: Observer) -> Quantities:
        """Run a few paths of a level without rounding anything, and let the observer see the run.

        Raises KernelError where the kernel raises.
        """
        draws = self.draws(level, 0, Purpose.LINES, paths)
        with with_place(level, REFERENCE):
            return self.caller_of(Widths(rest=None), observer).fine(draws, level)

    def errors(self, level: int, block: int, runs: Mapping[str, Widths]) -> dict[str, dict[str, Errors]] | Raised:
        """Return the errors by run and quantity; what the kernel raises in a run is returned in place of all."""
        draws = self.draws(level, block, Purpose.LINES)
        self._take({_NOTHING: Widths(rest=None), **runs}, level, block)
        plain = self._paths(draws, level, _NOTHING)
        if isinstance(plain, Raised):
            return plain
        keep = plain.finite()
        kept = None if keep.all() else keep
        found: dict[str, dict[str, Errors]] = {}
        for run in runs:
            paths = self._paths(draws, level, run)
            if isinstance(paths, Raised):
                return paths
            with np.errstate(all="ignore"):
                found[run] = {
                    name: Errors(
                        error=Series.of(paths.fine[name] - plain.fine[name], kept),
                        correction=Series.of(paths.difference(name) - plain.difference(name), kept)
                        if plain.coarse
                        else None,
                    )
                    for name in plain.fine
                }
        return found

    def judged(self, level: int, block: int, runs: Mapping[str, Run]) -> dict[str, LevelTally]:
        """Return by run the tally of a level in which that run stands for the narrow arm, beside all wider arms."""
        draws = self.draws(level, block, Purpose.LINES)
        self._take(runs, level, block)
        reference = self._paths(draws, level, REFERENCE)
        assert not isinstance(reference, Raised)  # what the reference raises is raised
        keep = reference.finite()
        kept = None if keep.all() else keep
        wide = [arm for arm in self.arms[1:] if arm != self._form and wider(arm, self._form)]
        beside = {REFERENCE: reference}
        raised: dict[str, Raised] = {}
        for arm in wide:
            paths = self._paths(draws, level, arm)
            if isinstance(paths, Raised):
                raised[arm] = paths
            else:
                beside[arm] = paths
        tallies = {}
        for run in runs:
            paths = self._paths(draws, level, run)
            lost = {self._form: paths} if isinstance(paths, Raised) else {}
            both = {**beside, **({} if isinstance(paths, Raised) else {self._form: paths})}
            with np.errstate(all="ignore"):
                quantities = {name: self._tally(name, both, kept) for name in reference.fine}
            tallies[run] = LevelTally(
                level=level,
                paths=keep.size,
                dropped=int(keep.size - np.count_nonzero(keep)),
                blocks=1,
                quantities=quantities,
                raised={**raised, **lost},
            )
        return tallies

    def forget(self, runs: Sequence[str]) -> None:
        """Let go of the private copies of runs that are done."""
        for run in runs:
            self._callers.pop(run, None)

    def _take(self, runs: Mapping[str, Run], level: int, block: int) -> None:
        """Make the private copies that are not there, or not to be used again."""
        for name, run in runs.items():
            if isinstance(run, Widths):
                if name not in self._callers:
                    self._callers[name] = self.caller_of(run)
            elif run.anew or name not in self._callers:
                self._callers[name] = self.caller(run.make(level, block))
