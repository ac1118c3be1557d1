"""The low branch alone against the low part of the correction, on the same draws, path by path and bit by bit."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.branchemulation import Case, Run
from narrowgauge.draws.coarsen import Draws
from narrowgauge.draws.streams import GRAIN, Purpose, apart
from narrowgauge.draws.tape import Tape
from narrowgauge.errors import KernelError
from narrowgauge.judge.branches import Doubles, differs, ulps
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.branchruns import Branch, BranchSource, given
from narrowgauge.measure.calls import Quantities
from narrowgauge.measure.moments import Series

__all__ = ["Comparer", "Mismatch"]


@dataclass(slots=True)
class Mismatch:
    """What two branches differ by in one quantity: D of the one less D of the other, and the first case of it.

    `apart` holds the distances of the paths that differ, in ulps: the larger one of the fine and the coarse path.
    """

    series: Series | None = None
    differing: int = 0
    largest: float = 0.0
    apart: list[Doubles] = field(default_factory=list)
    case: Case | None = None

    @property
    def paths(self) -> int:
        """The number of paths that were compared."""
        return 0 if self.series is None else self.series.moments.total + self.series.nonfinite

    def add(self, pairs: list[tuple[Doubles, Doubles]], arm: str) -> None:
        """Add a block: results of both sides on the fine path, and on the coarse one where there is one."""
        differ = np.logical_or.reduce([differs(low, correction) for low, correction in pairs])
        with np.errstate(all="ignore"):
            parts = [low - correction for low, correction in pairs]
            values = parts[0] - parts[1] if len(parts) > 1 else parts[0]
            values = np.where(differ, values, 0.0)  # NaN on both sides is no mismatch
            found = Series.of(values)
        self.series = found if self.series is None else self.series + found
        if differ.any():
            self.differing += int(differ.sum())
            finite = np.abs(values[np.isfinite(values)])
            self.largest = max(self.largest, float(finite.max(initial=0.0)))
            apart = [ulps(low[differ], correction[differ], FORMATS[arm]) for low, correction in pairs]
            self.apart.append(np.maximum.reduce(apart))


class Comparer:
    """Compares the branches of one narrow format, level by level; `wide` is the format of a pair's other half."""

    def __init__(
        self,
        runner: BlockRunner,
        sources: tuple[BranchSource, BranchSource],
        arm: str,
        wide: str | None,
        *,
        rows: bool,
    ) -> None:
        self._runner, self.arm, self.wide, self.rows = runner, arm, wide, rows
        self.sources = sources
        self._branches = [Branch(source, arm, wide, rows=rows) for source in sources]
        self._first = Branch(sources[0], REFERENCE, rows=rows) if sources[0].file.kernel.takes == "rng" else None

    def run(self, side: int, level: int) -> Run:
        """Return one side, 0 the low branch and 1 the correction, as what is looked into."""
        return Run(source=self.sources[side], arm=self.arm, wide=self.wide, level=level, rows=self.rows)

    def level(self, level: int, paths: int) -> dict[str, Mismatch]:
        """Compare blocks of a level, at least so many paths, and return what each quantity differs by."""
        found: dict[str, Mismatch] = {}
        ladder = self.sources[0].file.ladder
        size = min(self._runner.paths(level), -(-paths // GRAIN) * GRAIN)
        size = apart(size, ladder.steps(level), ladder.refinement)
        for block in range(-(-paths // size)):
            draws = self._runner.draws(level, block, Purpose.BRANCHES, size)
            pairs = self._pairs(draws, level)
            low, correction = pairs[0]
            for other in (correction, *(one for pair in pairs[1:] for one in pair)):
                _same_names(low, other, level, self.arm)
            for name in low:
                one = found.setdefault(name, Mismatch())
                results = [(here[name], there[name]) for here, there in pairs]
                one.add(results, self.arm)
                if one.case is None and one.differing and isinstance(draws, Draws):
                    one.case = self._case(draws, level, results)
        return found

    def _pairs(self, draws: Draws | Tape, level: int) -> list[tuple[Quantities, Quantities]]:
        """Return the results of both sides, on the fine path and on the coarse one."""
        coupled = self._runner.coupled(level)
        if isinstance(draws, Tape):
            if self._first is not None:  # writes what the formats have to ask for
                self._first.taped(draws, level, coupled=coupled)
            low, correction = (branch.taped(draws, level, coupled=coupled) for branch in self._branches)
            return list(zip(low, correction, strict=True))
        fine_given, coarse_given = given(draws, self.arm, self.wide, coupled=coupled)
        first, second = self._branches
        pairs = [(first.on(fine_given, level), second.on(fine_given, level))]
        if coarse_given is not None:
            pairs.append((first.on(coarse_given, level - 1), second.on(coarse_given, level - 1)))
        return pairs

    def _case(self, draws: Draws, level: int, results: list[tuple[Doubles, Doubles]]) -> Case:
        """Return the paths that differ, fine ones if there are any."""
        both = given(draws, self.arm, self.wide, coupled=len(results) > 1)
        for place, (low, correction) in enumerate(results):
            part = both[place]
            if part is not None and differs(low, correction).any():
                return Case.of(level - place, part, low, correction)
        raise AssertionError("some path differs")


def _same_names(here: Quantities, there: Quantities, level: int, arm: str) -> None:
    if set(here) != set(there):
        what = f"one branch returned {', '.join(here)}, the other one {', '.join(there)}"
        raise KernelError(f"{what}; accepted: the same quantities from both", level=level, arm=arm)
