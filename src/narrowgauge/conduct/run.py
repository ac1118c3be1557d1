"""Draw paths, judge, and draw more until every level is settled or the budget ends."""

from __future__ import annotations

import operator
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

from threadpoolctl import threadpool_limits

from narrowgauge.conduct.trial import examine
from narrowgauge.judge.schemes import LevelJudgement, judge_level
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.tally import LevelTally
from narrowgauge.record.audit import TrialEntry

__all__ = ["Outcome", "Plan", "Watcher", "run"]

_TIMED_LEVEL = 3  # its first block is run first, to say how long the rest takes; it is kept
_TIMED_PATHS = 32  # of a kernel that is run path by path


@dataclass(frozen=True, slots=True, kw_only=True)
class PlannedLevel:
    """Paths of one level at the first look and at the last."""

    level: int
    steps: int
    paths_first_look: int
    paths_most: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """What an audit will run: path steps count fine and coarse steps of every arm; seconds are an estimate."""

    levels: tuple[PlannedLevel, ...]
    path_steps: int
    most_path_steps: int
    seconds: float
    most_seconds: float


class Watcher(Protocol):
    """Is told how an audit gets on."""

    def planned(self, plan: Plan) -> None:
        """Hear the plan, once, before the measurement."""

    def look(self, number: int, looks: int, levels: Sequence[int], path_steps: int) -> None:
        """Hear that a look begins: which levels draw more paths, and how many path steps that takes."""

    def advanced(self, steps: int) -> None:
        """Hear that so many path steps are done."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """All that was measured and judged; `alpha` is 1 - confidence of each look."""

    tallies: Mapping[int, LevelTally]
    judgements: Mapping[int, LevelJudgement]
    alpha: float
    trial: TrialEntry


def run(
    file: AuditFile,
    kernel: KernelSource,
    *,
    settled: Callable[[LevelJudgement], bool] = operator.attrgetter("settled"),
    watcher: Watcher | None = None,
) -> Outcome:
    """Measure and judge every level: at `paths`, twice that, four times ... up to `most_paths`, in whole blocks.

    `settled` says whether a level needs no more paths; for an audit, whether no format is undecided on it. Levels that
    are not settled at one look draw more paths for the next; each of J looks has confidence
    1 - (1 - confidence) / J. Raises what the trial before it and the blocks raise.
    """
    with threadpool_limits(limits=1):  # the same sums in the same order, whatever machine
        return _Conductor(file, kernel, settled, watcher).run()


class _Conductor:
    def __init__(
        self,
        file: AuditFile,
        kernel: KernelSource,
        settled: Callable[[LevelJudgement], bool],
        watcher: Watcher | None,
    ) -> None:
        self._file = file
        self._kernel = kernel
        self._settled = settled
        self._watcher = watcher
        self._runner = BlockRunner(file, kernel)
        self._tallies: dict[int, LevelTally] = {}
        self._early: dict[int, LevelTally] = {}

    def run(self) -> Outcome:
        file = self._file
        trial = examine(file, self._kernel, self._runner)
        looks = self._looks()
        alpha = (1 - file.sampling.confidence) / len(looks)
        if self._watcher is not None:
            self._watcher.planned(self._plan(looks))
        judgements: dict[int, LevelJudgement] = {}
        pending = list(file.ladder.levels)
        for number, target in enumerate(looks, start=1):
            self._announce(number, len(looks), pending, target)
            for level in pending:
                self._draw(level, target)
                judgements[level] = judge_level(self._tallies[level], file, alpha)
            pending = [level for level in pending if not self._settled(judgements[level])]
            if not pending:
                break
        return Outcome(tallies=self._tallies, judgements=judgements, alpha=alpha, trial=trial)

    def _looks(self) -> list[int]:
        """Return the paths at which levels are judged: doubled within the budget, each with a block that is new."""
        sampling, looks = self._file.sampling, []
        seen: list[int] = []
        target = sampling.paths
        while target <= sampling.most_paths:
            drawn = [self._rounded_up(level, target) for level in self._file.ladder.levels]
            if drawn != seen:
                looks.append(target)
            seen, target = drawn, 2 * target
        return looks

    def _draw(self, level: int, target: int) -> None:
        """Run whole blocks, in the order of their keys, until a level has at least `target` paths."""
        while (done := self._tallies.get(level)) is None or done.paths < target:
            block = 0 if done is None else done.blocks
            early = self._early.pop(level, None) if block == 0 else None
            tally = early if early is not None else self._runner.run(level, block)
            self._tallies[level] = tally if done is None else done + tally
            if self._watcher is not None:
                self._watcher.advanced(tally.paths * self._steps(level))

    def _steps(self, level: int) -> int:
        """Return the steps that one path takes on a level: fine and coarse, in every arm."""
        ladder = self._file.ladder
        steps = ladder.steps(level) + (ladder.steps(level - 1) if self._runner.coupled(level) else 0)
        return steps * len(self._runner.arms)

    def _announce(self, number: int, looks: int, pending: Sequence[int], target: int) -> None:
        if self._watcher is not None:
            missing = {level: self._rounded_up(level, target) - self._done(level) for level in pending}
            steps = sum(paths * self._steps(level) for level, paths in missing.items())
            self._watcher.look(number, looks, tuple(pending), steps)

    def _done(self, level: int) -> int:
        return self._tallies[level].paths if level in self._tallies else 0

    def _rounded_up(self, level: int, target: int) -> int:
        block = self._runner.paths(level)
        return -(-target // block) * block

    def _plan(self, looks: Sequence[int]) -> Plan:
        """Time the first block of a middle level, which is kept, and say what the rest will take.

        Of a kernel that is run path by path a few paths are timed: a block could take hours.
        """
        levels = tuple(
            PlannedLevel(
                level=level,
                steps=self._file.ladder.steps(level),
                paths_first_look=self._rounded_up(level, looks[0]),
                paths_most=self._rounded_up(level, looks[-1]),
            )
            for level in self._file.ladder.levels
        )
        timed = min(_TIMED_LEVEL, self._file.ladder.finest)
        if self._runner.singly:
            each = self._runner.seconds(timed, _TIMED_PATHS) / (_TIMED_PATHS * self._steps(timed))
        else:
            start = time.perf_counter()
            self._early[timed] = self._runner.run(timed, 0)
            each = (time.perf_counter() - start) / (self._early[timed].paths * self._steps(timed))
        first = sum(one.paths_first_look * self._steps(one.level) for one in levels)
        most = sum(one.paths_most * self._steps(one.level) for one in levels)
        return Plan(
            levels=levels,
            path_steps=first,
            most_path_steps=most,
            seconds=first * each,
            most_seconds=most * each,
        )
