"""Engines: keys of blocks go in, finished blocks come back, in whatever order; and the engine of this process alone.

A block is a function of its key and of the audit file, so that an engine may run it anywhere, and twice.
"""

from __future__ import annotations

import functools
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass
from types import TracebackType
from typing import Generic, Protocol, TypeVar

from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.measure.task import Bench, Block, Key, run_block

__all__ = ["TRIAL", "Engine", "Errand", "SerialEngine", "errand_of", "largest_first"]

T = TypeVar("T")
TRIAL = "the trial run"  # what a task is called in messages unless it has a name


@dataclass(frozen=True, slots=True, kw_only=True)
class Errand(Generic[T]):
    """A task that travels: what messages call it, its level if it has one, and a module's function of a bench."""

    name: str
    level: int | None
    run: Callable[[Bench], T]


class Engine(Protocol):
    """Runs tasks of one audit. Use it as a context manager: leaving it stops whatever still runs."""

    title: str  # what ran the blocks, in words
    workers: int  # how many blocks run at a time, as far as that is known

    def __enter__(self) -> Engine:
        """Make ready."""

    def __exit__(
        self, kind: type[BaseException] | None, problem: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Stop whatever still runs."""

    def call(self, task: Callable[[Bench], T], name: str = TRIAL) -> T:
        """Run one task, a module's function, at a bench and return its result; raises what it raises.

        Messages about a worker that crashes or is past its time limit call it by its name.
        """

    def blocks(self, sizes: Mapping[Key, int]) -> Iterator[Block]:
        """Run the blocks of these keys, each with its size in steps, and yield each as it is finished.

        Raises what `BlockRunner.run` raises, at the first block that fails, after all that were finished before.
        """

    def errands(self, wanted: Iterable[Errand[T]]) -> Iterator[T]:
        """Run tasks, handed out in this order, and yield their results as they are finished.

        Raises what a task raises, at the first one that fails, after all that were finished before.
        """


def errand_of(key: Key) -> Errand[Block]:
    """Return the task of a block."""
    level, block = key
    return Errand(name=f"block {block}", level=level, run=functools.partial(run_block, level=level, block=block))


def largest_first(sizes: Mapping[Key, int]) -> list[Key]:
    """Return keys in the order in which workers get them: the last ones are small, so that all end about together."""
    return sorted(sizes, key=lambda key: (-sizes[key], key))


class SerialEngine:
    """Runs one block after the other, in the order of the keys, in this process."""

    title = "one process"
    workers = 1

    def __init__(self, file: AuditFile, kernel: KernelSource) -> None:
        self._bench = Bench(file, kernel)

    def __enter__(self) -> SerialEngine:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, problem: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Leave nothing behind."""

    def call(self, task: Callable[[Bench], T], name: str = TRIAL) -> T:
        """Run one task; what it raises passes through."""
        return task(self._bench)

    def blocks(self, sizes: Mapping[Key, int]) -> Iterator[Block]:
        """Run the blocks in the order of their keys."""
        for level, block in sorted(sizes):
            yield run_block(self._bench, level, block)

    def errands(self, wanted: Iterable[Errand[T]]) -> Iterator[T]:
        """Run the tasks one after the other."""
        for errand in wanted:
            yield errand.run(self._bench)
