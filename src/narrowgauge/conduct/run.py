"""Draw paths, judge, and draw more until every level is settled or the budget ends."""

from __future__ import annotations

import functools
import operator
from collections.abc import Callable, Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

import msgspec

from narrowgauge.conduct.branches import broken_splits
from narrowgauge.conduct.prepare import prepare
from narrowgauge.conduct.scenarios import DomainPlan, domain_plan
from narrowgauge.conduct.stepcosts import with_costs
from narrowgauge.conduct.study import Study, study
from narrowgauge.errors import DispatchError, KernelError, WorkerError
from narrowgauge.judge.schemes import LevelJudgement, judge_level
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.measure.arms import REFERENCE, arms_of
from narrowgauge.measure.engines import Engine, SerialEngine
from narrowgauge.measure.store import Ledger
from narrowgauge.measure.tally import LevelTally
from narrowgauge.measure.task import Block, Key, pinned
from narrowgauge.record.audit import TrialEntry
from narrowgauge.record.branches import BranchesEntry
from narrowgauge.record.costs import CostEntry
from narrowgauge.record.draws import DrawsEntry

__all__ = ["Outcome", "Plan", "Watcher", "run"]

_COSTS = "costs"  # in the ledger


@dataclass(frozen=True, slots=True, kw_only=True)
class PlannedLevel:
    """Paths of one level at the first look and at the last."""

    level: int
    steps: int
    paths_first_look: int
    paths_most: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """What an audit will run: path steps count fine and coarse steps of every arm; seconds are an estimate.

    `kept` blocks are there from before; the seconds leave them out, the path steps do not. What scenarios take comes on
    top, as `domain`.
    """

    levels: tuple[PlannedLevel, ...]
    path_steps: int
    most_path_steps: int
    seconds: float
    most_seconds: float
    kept: int = 0
    domain: DomainPlan | None = None


class Watcher(Protocol):
    """Is told how an audit gets on."""

    def planned(self, plan: Plan) -> None:
        """Hear the plan, once, before the measurement."""

    def look(self, number: int, looks: int, levels: Sequence[int], path_steps: int) -> None:
        """Hear that a look begins: which levels draw more paths, and how many path steps that takes."""

    def scenarios(self, number: int, looks: int, scenarios: int, path_steps: int) -> None:
        """Hear that a look at so many scenarios begins, and how many path steps that takes."""

    def advanced(self, steps: int) -> None:
        """Hear that so many path steps are done."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """All that was measured and judged; `alpha` is 1 - confidence of each look.

    `fingerprints` are those of the processes that measured, each once and in order; `draws` the approximate ones;
    `costs` are measured ones; `branches` is what came of comparing those of a split; `study` is what was looked at
    besides, None where that was stopped or not wanted.
    """

    tallies: Mapping[int, LevelTally]
    judgements: Mapping[int, LevelJudgement]
    alpha: float
    trial: TrialEntry
    fingerprints: tuple[str, ...] = ()
    draws: DrawsEntry | None = None
    costs: dict[str, CostEntry] | None = None
    branches: BranchesEntry | None = None
    study: Study | None = None


def run(
    file: AuditFile,
    kernel: KernelSource,
    *,
    settled: Callable[[LevelJudgement], bool] = operator.attrgetter("settled"),
    watcher: Watcher | None = None,
    engine: Engine | None = None,
    ledger: Ledger | None = None,
    studied: bool = True,
    open_levels: Callable[[Outcome], Collection[int]] | None = None,
) -> Outcome:
    """Measure and judge every level: at `paths`, twice that, four times ... up to `most_paths`, in whole blocks.

    `settled` says whether a level needs no more paths; for an audit, whether no format is undecided on it. Levels that
    are not settled at one look draw more paths for the next; each of J looks has confidence
    1 - (1 - confidence) / J. With `open_levels`, which is told all that is there so far, those that it returns draw
    more instead. `engine` runs the blocks, one after the other in this process unless given; what the `ledger` has is
    not run again, and what is finished is put there. `studied`: when all is measured every number of a few paths is
    looked at. Raises what the trial and the blocks raise.
    """
    with pinned():  # the same sums in the same order, whatever machine
        conductor = _Conductor(
            file, settled, watcher, engine or SerialEngine(file, kernel), ledger, open_levels=open_levels
        )
        return conductor.run(studied=studied)


def _known_costs(ledger: Ledger | None) -> dict[str, CostEntry] | None:
    """Return the costs that an audit measured before it was stopped; the schemes that it weighed hang on them."""
    text = None if ledger is None else ledger.noted(_COSTS)
    return None if text is None else msgspec.json.decode(text, type=dict[str, CostEntry])


class _Conductor:
    def __init__(
        self,
        file: AuditFile,
        settled: Callable[[LevelJudgement], bool],
        watcher: Watcher | None,
        engine: Engine,
        ledger: Ledger | None,
        *,
        open_levels: Callable[[Outcome], Collection[int]] | None,
    ) -> None:
        self._settled, self._open_levels = settled, open_levels
        self._watcher = watcher
        self._engine = engine
        self._ledger = ledger
        self._prepared = engine.call(functools.partial(prepare, costs=_known_costs(ledger)))
        if ledger is not None and self._prepared.costs is not None:
            ledger.note(_COSTS, msgspec.json.encode(self._prepared.costs).decode())
        self._file = with_costs(file, self._prepared.costs)
        self._arms = len(arms_of(file.arms))
        self._tallies: dict[int, LevelTally] = {}
        self._waiting: dict[Key, Block] = {}  # finished, and before their turn
        self._fingerprints: set[str] = set()
        self._names: tuple[int, list[str]] | None = None  # the level of the first block, and its quantities

    def run(self, *, studied: bool) -> Outcome:
        file = self._file
        looks = self._looks()
        alpha = (1 - file.sampling.confidence) / len(looks)
        if self._watcher is not None:
            self._watcher.planned(self._plan(looks))
        judgements: dict[int, LevelJudgement] = {}
        pending = list(file.ladder.levels)
        for number, target in enumerate(looks, start=1):
            self._announce(number, len(looks), pending, target)
            for level in self._drawn(pending, target):
                broken = broken_splits(self._prepared.branches, level)
                judgements[level] = judge_level(self._tallies[level], file, alpha, broken)
            if self._open_levels is None:
                pending = [level for level in pending if not self._settled(judgements[level])]
            else:
                pending = sorted(self._open_levels(self._outcome(judgements, alpha)))
            if not pending:
                break
        return self._outcome(judgements, alpha, studied=studied)

    def _outcome(self, judgements: Mapping[int, LevelJudgement], alpha: float, *, studied: bool = False) -> Outcome:
        return Outcome(
            tallies=self._tallies,
            judgements=judgements,
            alpha=alpha,
            trial=self._prepared.trial,
            fingerprints=tuple(sorted(self._fingerprints)),
            draws=self._prepared.draws,
            costs=self._prepared.costs,
            branches=self._prepared.branches,
            study=self._studied() if studied else None,
        )

    def _studied(self) -> Study | None:
        """Look at what is no part of the measurement, which nothing that happens here may cost."""
        try:
            return self._engine.call(study)
        except (DispatchError, KernelError, WorkerError):
            return None

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

    def _drawn(self, pending: Sequence[int], target: int) -> Iterator[int]:
        """Run the blocks that levels lack to have `target` paths, and yield each level as soon as it has them.

        All blocks of all levels are asked for at once, so that no worker waits for a level or for a judgement.
        """
        last = {level: self._rounded_up(level, target) // self._prepared.paths[level] for level in pending}
        keys = [(level, block) for level in pending for block in range(self._blocks(level), last[level])]
        missing = {key: self._size(key) for key in keys if not self._has(key)}
        for level in pending:
            if self._merged(level, last[level]):
                yield level
        for block in self._engine.blocks(missing) if missing else ():
            self._keep(block)
            if self._merged(block.level, last[block.level]):
                yield block.level

    def _has(self, key: Key) -> bool:
        return key in self._waiting or (self._ledger is not None and key in self._ledger)

    def _keep(self, block: Block) -> None:
        if self._ledger is not None:
            self._ledger.put(block)
        self._waiting[block.level, block.block] = block

    def _merged(self, level: int, last: int) -> bool:
        """Add the blocks of a level whose turn has come, in the order of their keys; return whether it has all."""
        while (number := self._blocks(level)) < last and self._has(key := (level, number)):
            block = self._waiting.pop(key, None)
            if block is None:
                assert self._ledger is not None  # it has the block
                block = self._ledger.block(key)
            done, tally = self._tallies.get(level), block.tally
            self._check_names(tally)
            self._tallies[level] = tally if done is None else done + tally
            self._fingerprints.add(block.fingerprint)
            if self._watcher is not None:
                self._watcher.advanced(self._size(key))
        return self._blocks(level) == last

    def _check_names(self, tally: LevelTally) -> None:
        """Raise KernelError unless a block has the quantities of the first one: a worker knows its own blocks only."""
        first, known = self._names = self._names or (tally.level, list(tally.quantities))
        if set(tally.quantities) != set(known):
            here, there = ", ".join(tally.quantities), ", ".join(known)
            what = f"the kernel returned {here} where level {first} has {there}"
            raise KernelError(what, level=tally.level, arm=REFERENCE)

    def _blocks(self, level: int) -> int:
        return self._tallies[level].blocks if level in self._tallies else 0

    def _size(self, key: Key) -> int:
        return self._prepared.paths[key[0]] * self._steps(key[0])

    def _steps(self, level: int) -> int:
        """Return the steps that one path takes on a level: fine and coarse, in every arm."""
        ladder = self._file.ladder
        steps = ladder.steps(level) + (ladder.steps(level - 1) if self._prepared.coupled[level] else 0)
        return steps * self._arms

    def _announce(self, number: int, looks: int, pending: Sequence[int], target: int) -> None:
        if self._watcher is not None:
            missing = {level: self._rounded_up(level, target) - self._done(level) for level in pending}
            steps = sum(paths * self._steps(level) for level, paths in missing.items())
            self._watcher.look(number, looks, tuple(pending), steps)

    def _done(self, level: int) -> int:
        return self._tallies[level].paths if level in self._tallies else 0

    def _rounded_up(self, level: int, target: int) -> int:
        block = self._prepared.paths[level]
        return -(-target // block) * block

    def _plan(self, looks: Sequence[int]) -> Plan:
        """Say what the measurement will take, from the first block of a middle level: it is run first, and kept."""
        levels = tuple(
            PlannedLevel(
                level=level,
                steps=self._file.ladder.steps(level),
                paths_first_look=self._rounded_up(level, looks[0]),
                paths_most=self._rounded_up(level, looks[-1]),
            )
            for level in self._file.ladder.levels
        )
        each = self._seconds()
        first = sum(one.paths_first_look * self._steps(one.level) for one in levels)
        most = sum(one.paths_most * self._steps(one.level) for one in levels)
        kept = () if self._ledger is None else tuple(self._ledger.kept)
        at_once = each / self._engine.workers
        return Plan(
            levels=levels,
            path_steps=first,
            most_path_steps=most,
            seconds=(first - self._known(kept, looks[0])) * at_once,
            most_seconds=(most - self._known(kept, looks[-1])) * at_once,
            kept=len(kept),
            domain=domain_plan(
                self._file,
                self._prepared.speed,
                self._engine.workers,
                () if self._ledger is None else self._ledger.kept_looks,
            ),
        )

    def _seconds(self) -> float:
        """Return the time of one step of one path."""
        prepared = self._prepared
        if prepared.seconds is not None:
            return prepared.seconds / self._steps(prepared.timed_level)
        key = (prepared.timed_level, 0)
        if self._ledger is not None and key in self._ledger:
            timed = self._ledger.block(key)
        else:
            (timed,) = self._engine.blocks({key: self._size(key)})
            self._keep(timed)
        return timed.seconds / self._size(key)

    def _known(self, kept: Sequence[Key], target: int) -> int:
        """Return the path steps up to a look that need not be run again."""
        return sum(
            self._size((level, block))
            for level, block in kept
            if block * self._prepared.paths[level] < self._rounded_up(level, target)
        )
