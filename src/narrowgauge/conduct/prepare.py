"""What is found out before the measurement, where blocks will be run: a kernel may end the process that runs it."""

from __future__ import annotations

from dataclasses import dataclass

from narrowgauge.conduct.branches import branches_entry
from narrowgauge.conduct.owntrial import examine_own
from narrowgauge.conduct.separated import draws_entry
from narrowgauge.conduct.stepcosts import step_costs
from narrowgauge.conduct.trial import examine
from narrowgauge.measure.task import Bench, pinned
from narrowgauge.record.audit import TrialEntry
from narrowgauge.record.branches import BranchesEntry
from narrowgauge.record.costs import CostEntry
from narrowgauge.record.draws import DrawsEntry

__all__ = ["Prepared", "prepare"]


_TIMED_LEVEL = 3
_TIMED_PATHS = 32


@dataclass(frozen=True, slots=True, kw_only=True)
class Prepared:
    """What the trial showed, and by level the paths of a block and whether there is a coarse path.

    `seconds` is the time of one path of `timed_level` in all arms, known beforehand where a kernel is run path by path:
    a block of it could take hours. `draws` are the approximate ones, if there are any; `costs` those of a step by
    format, where they are to be measured; `branches` says whether those of a split cancel.
    """

    trial: TrialEntry
    paths: tuple[int, ...]
    coupled: tuple[bool, ...]
    timed_level: int
    seconds: float | None
    draws: DrawsEntry | None
    costs: dict[str, CostEntry] | None
    branches: BranchesEntry | None = None


def prepare(bench: Bench, costs: dict[str, CostEntry] | None = None) -> Prepared:
    """Run the trial at a bench, and measure costs where they are wanted and not known.

    Raises what `examine` raises, or `examine_own`, and `branches_entry`.
    """
    runner, ladder = bench.runner, bench.file.ladder
    timed = min(_TIMED_LEVEL, ladder.finest)
    trial = examine_own if bench.file.kernel.rounds == "itself" else examine
    with pinned():
        return Prepared(
            trial=trial(bench.file, bench.kernel, runner),
            paths=tuple(runner.paths(level) for level in ladder.levels),
            coupled=tuple(runner.coupled(level) for level in ladder.levels),
            timed_level=timed,
            seconds=runner.seconds(timed, _TIMED_PATHS) / _TIMED_PATHS if runner.singly else None,
            draws=draws_entry(bench.file, runner.approximation),
            costs=step_costs(bench.file, runner) if bench.file.cost.measured and costs is None else costs,
            branches=branches_entry(bench.file, bench.kernel, runner),
        )
