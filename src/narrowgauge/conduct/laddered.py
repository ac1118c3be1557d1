"""A changed narrow format judged on every level of the ladder, by the rules of the formats themselves.

What is changed, lines kept wide or another way of rounding, takes the place of the narrow format in an audit file that
has its cost: it then has errors, rivals and verdicts like any format. A split that the audit refuses, since its
branches do not cancel, is refused of the changed format, too: nobody has compared its own.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from msgspec.structs import replace

from narrowgauge.conduct.entries import interval_fields
from narrowgauge.judge.schemes import ArmJudgement, LevelJudgement, judge_level
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.linearms import LineRunner, Run
from narrowgauge.measure.tally import LevelTally

__all__ = ["Changed", "edge_of", "on_ladder", "pays_fields", "tallies_of"]

_LOOKS = 3  # paths are doubled so often less one where a verdict is open


@dataclass(frozen=True, slots=True, kw_only=True)
class Changed:
    """A narrow format that is computed by a `run` of its own and costs something else per step."""

    form: str
    run: Run
    step_cost: float

    def file(self, file: AuditFile) -> AuditFile:
        """Return an audit file in which this is the narrow format, and alone to be judged."""
        costs = replace(file.costs, **{self.form: self.step_cost})
        return replace(file, formats=replace(file.formats, narrow=(self.form,)), draws=None, timed=costs)

    def judged(
        self, file: AuditFile, tally: LevelTally, alpha: float, broken: Mapping[int, Collection[str]]
    ) -> LevelJudgement:
        """Judge it on one level; `broken` has, by level, the formats of which no split is admissible."""
        return judge_level(tally, self.file(file), alpha, broken.get(tally.level, ()))


def on_ladder(
    file: AuditFile,
    runner: LineRunner,
    changes: Mapping[str, Changed],
    confidence: float,
    *,
    broken: Mapping[int, Collection[str]],
    skip: int = 0,
) -> dict[str, list[LevelJudgement]]:
    """Judge changes on one level after the other, each until a level on which it does not pay.

    Each level is looked at with sampling.paths, and where a verdict is open with twice and four times as many, up to
    sampling.most_paths. `confidence` is that of all looks at a change together. The first `skip` blocks are not used:
    those by which the changes were chosen. No split of a `broken` format is admissible, by level.
    """
    judged: dict[str, list[LevelJudgement]] = {name: [] for name in changes}
    alpha = (1 - confidence) / _LOOKS
    going = list(changes)
    for level in file.ladder.levels:
        open_ones, done, paths = going, 0, file.sampling.paths
        tallies: dict[str, LevelTally] = {}
        found: dict[str, LevelJudgement] = {}
        for _ in range(_LOOKS):
            asked = {name: changes[name] for name in open_ones}
            new = tallies_of(runner, asked, level, done=done, paths=paths, skip=skip)
            for name in open_ones:
                tallies[name] = tallies[name] + new[name] if name in tallies else new[name]
                found[name] = changes[name].judged(file, tallies[name], alpha, broken)
            done, paths = tallies[open_ones[0]].blocks, 2 * paths
            open_ones = [name for name in open_ones if not found[name].settled]
            if not open_ones or paths > file.sampling.most_paths:
                break
        for name in going:
            judged[name].append(found[name])
        going = [name for name in going if _not_refused(found[name], changes[name].form)]
        if not going:
            break
    runner.forget(list(changes))
    return judged


def tallies_of(
    runner: LineRunner, changes: Mapping[str, Changed], level: int, *, done: int, paths: int, skip: int = 0
) -> dict[str, LevelTally]:
    """Run the blocks after the first `done`, at least one, that a level lacks to have `paths` paths.

    Blocks are counted from the one after the first `skip` on.
    """
    runs = {name: change.run for name, change in changes.items()}
    last = max(math.ceil(paths / runner.paths(level)), done + 1)
    total: dict[str, LevelTally] = {}
    for block in range(done, last):
        for name, tally in runner.judged(level, skip + block, runs).items():
            total[name] = total[name] + tally if name in total else tally
    return total


def edge_of(judgement: LevelJudgement, form: str) -> float:
    """Return the smallest edge of all quantities; 0 where one has none."""
    return min(0.0 if arm.edge is None else arm.edge.estimate for arm in _arms(judgement, form))


def pays_fields(judged: Sequence[LevelJudgement], form: str) -> dict[str, Any]:
    """Return how far a change pays, and gain and edge on the finest such level, as fields of an entry."""
    verdicts = [[arm.verdict for arm in _arms(one, form)] for one in judged]
    paying = len(list(itertools.takewhile(lambda found: all(one == "pays" for one in found), verdicts)))
    possible = len(list(itertools.takewhile(lambda found: "does not pay" not in found, verdicts)))
    worst = None
    if paying:
        arms = _arms(judged[paying - 1], form)
        worst = min(arms, key=lambda arm: 0.0 if arm.edge is None else arm.edge.estimate)
    return {
        "level": paying - 1 if paying else None,
        "possible": possible - 1 if possible else None,
        **interval_fields("gain", None if worst is None else worst.gain),
        **interval_fields("edge", None if worst is None else worst.edge),
    }


def _not_refused(judgement: LevelJudgement, form: str) -> bool:
    return all(arm.verdict != "does not pay" for arm in _arms(judgement, form))


def _arms(judgement: LevelJudgement, form: str) -> list[ArmJudgement]:
    return [arms[form] for arms in judgement.arms.values()]
