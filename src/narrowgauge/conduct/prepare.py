"""What is found out before the measurement, where blocks will be run: a kernel may end the process that runs it."""

from __future__ import annotations

from dataclasses import dataclass

from narrowgauge.conduct.trial import identity_run
from narrowgauge.measure.task import Bench, pinned
from narrowgauge.record.audit import ReachEntry

__all__ = ["Prepared", "prepare"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Prepared:
    """What the identity run reached, and by level the paths of a block and whether there is a coarse path."""

    reach: ReachEntry
    paths: tuple[int, ...]
    coupled: tuple[bool, ...]


def prepare(bench: Bench) -> Prepared:
    """Run the identity run at a bench; raises what `identity_run` raises."""
    runner, levels = bench.runner, bench.file.ladder.levels
    with pinned():
        return Prepared(
            reach=identity_run(bench.file, bench.kernel, runner),
            paths=tuple(runner.paths(level) for level in levels),
            coupled=tuple(runner.coupled(level) for level in levels),
        )
