"""One look at one scenario: the kernel at other parameters, a few blocks of every level that is not decided yet.

The look travels with its parameters and comes back whole, so that a scenario's copies of the kernel are made by few
workers. A kernel that raises in the reference, or leaves the emulation, ends the look: there it cannot be audited.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from time import perf_counter

import msgspec

from narrowgauge.draws.streams import GRAIN
from narrowgauge.errors import DispatchError, KernelError, said
from narrowgauge.kernel.raised import OF_THE_MACHINE
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.packing import packed, unpacked
from narrowgauge.measure.provenance import fingerprint_of_process
from narrowgauge.measure.tally import LevelTally
from narrowgauge.measure.task import Bench, pinned

__all__ = ["Look", "Speed", "Wanted", "run_look", "speed"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Look:
    """A finished look: the tallies of its blocks and what ended it early, packed; its seconds, and where it was run."""

    scenario: int
    look: int
    data: bytes
    seconds: float
    fingerprint: str

    def opened(self) -> tuple[list[LevelTally], str | None]:
        """Return the tallies of the blocks in their order, and what the kernel met in the reference, or None.

        Raises ValueError where `data` holds nothing of the kind.
        """
        try:
            tallies, problem = msgspec.msgpack.decode(self.data, type=tuple[list[bytes], str | None])
        except msgspec.DecodeError as trouble:
            raise ValueError(f"not a packed look: {trouble}") from None
        return [unpacked(one) for one in tallies], problem


@dataclass(frozen=True, slots=True, kw_only=True)
class Wanted:
    """What a look is to run: levels up to so many `paths`, in blocks of at most `block` paths.

    Each of `levels` comes with the number of its next block, and with the paths that it has.
    """

    paths: int
    block: int
    levels: tuple[tuple[int, int, int], ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Speed:
    """What a scenario takes: seconds until its copies of the kernel are made, and of one path of `level` in all arms.

    The paths are run in blocks as small as those of a scenario.
    """

    copies: float
    path: float
    level: int


def run_look(bench: Bench, scenario: int, look: int, parameters: Mapping[str, float], wanted: Wanted) -> Look:
    """Look at a scenario at a bench, with copies of the kernel made for it alone.

    Raises what a block raises for want of memory or files; what it raises for the kernel is kept.
    """
    bench.warm()
    with pinned():
        start = perf_counter()
        tallies, problem = [], None
        try:
            runner = bench.runner.elsewhere(scenario, parameters, wanted.block)
            for level, number, done in wanted.levels:
                for tally in _blocks(runner, level, number, wanted.paths - done):
                    tallies.append(packed(tally))
        except (KernelError, DispatchError) as trouble:
            if isinstance(trouble.__cause__, OF_THE_MACHINE):
                raise
            problem = _shown(bench, said(trouble))
        return Look(
            scenario=scenario,
            look=look,
            data=msgspec.msgpack.encode((tallies, problem)),
            seconds=perf_counter() - start,
            fingerprint=fingerprint_of_process(),
        )


def speed(runner: BlockRunner, level: int, block: int) -> Speed:
    """Return how long a scenario takes at the audited point: a block of a level, once anew and once with its copies.

    Raises what a block raises.
    """
    start = perf_counter()
    elsewhere = runner.elsewhere(0, {}, block)  # scenarios are counted from 1
    elsewhere.run(level, 0)
    first = perf_counter() - start
    tally = elsewhere.run(level, 0)
    again = perf_counter() - start - first
    return Speed(copies=max(0.0, first - again), path=again / tally.paths, level=level)


def _blocks(runner: BlockRunner, level: int, number: int, paths: int) -> Iterator[LevelTally]:
    """Run blocks of a level until they have so many paths, or nearly: some blocks are 32 paths short."""
    while paths >= GRAIN // 2:
        tally = runner.run(level, number)
        yield tally
        number, paths = number + 1, paths - tally.paths


def _shown(bench: Bench, text: str) -> str:
    """Return a message with files named as a record names them, and nothing that UTF-8 cannot hold."""
    kernel = bench.kernel
    own = [] if kernel.code is None else [kernel.code.co_filename]
    for file in sorted({*own, *map(str, kernel.sources.files())}, key=len, reverse=True):
        text = text.replace(file, bench.file.shown(file))
    return text.encode("utf-8", "backslashreplace").decode()
