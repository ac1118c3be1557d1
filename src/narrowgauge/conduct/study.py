"""What is looked at when the measurement is done: every number of a few paths, and a sample of values to be summed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from narrowgauge.conduct.ranges import watched_range
from narrowgauge.draws.streams import GRAIN
from narrowgauge.measure.task import Bench, pinned
from narrowgauge.record.range import WatchedEntry

__all__ = ["Study", "study"]

_PATHS_SINGLY = 128  # of a kernel that is called for one at a time


@dataclass(frozen=True, slots=True, kw_only=True)
class Study:
    """What was seen on a few paths, None of a kernel that rounds for itself, and D by level, arm and quantity."""

    watched: WatchedEntry | None
    samples: dict[int, dict[str, dict[str, npt.NDArray[np.float64]]]]


def study(bench: Bench) -> Study:
    """Look at every number, and draw the sample, at a bench; raises what the blocks of the measurement do."""
    file, runner = bench.file, bench.runner
    with pinned():
        return Study(
            watched=None if file.kernel.rounds == "itself" else watched_range(file, runner),
            samples={
                level: runner.differences(level, _PATHS_SINGLY if runner.singly else GRAIN)
                for level in file.ladder.levels
            },
        )
