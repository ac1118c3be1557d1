"""Workers that belong to somebody else: any executor of concurrent.futures, and a dask cluster through one.

An executor gets this program's own function and plain data; what it does with threads, processes or machines is its
affair. It cannot be told to end a block that takes too long, nor to replace a process that a kernel ends.
"""

from __future__ import annotations

import queue
from collections.abc import Callable, Iterable, Iterator, Mapping
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from contextlib import ExitStack, contextmanager
from types import TracebackType
from typing import Any, TypeVar

from narrowgauge.errors import WorkerError, said
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.measure.engines import TRIAL, Errand, errand_of, largest_first
from narrowgauge.measure.task import Bench, Block, Key, Reply, here, job_for, run_task

__all__ = ["ExecutorEngine", "cluster"]

T = TypeVar("T")

_CONNECTING = 30  # seconds


class ExecutorEngine:
    """Runs blocks on an executor, all of them submitted at once; `workers` is how many it runs at a time, if known."""

    def __init__(
        self,
        file: AuditFile,
        kernel: KernelSource,
        executor: Executor,
        token: str,
        *,
        workers: int = 1,
        title: str = "",
    ) -> None:
        self.title = title or f"executor {type(executor).__name__}"
        self.workers = workers
        self._executor = executor
        # A function that other processes cannot find is at hand for threads of this one.
        self._job = job_for(file, kernel, token, travels=not isinstance(executor, ThreadPoolExecutor))
        self._kernel = file, kernel
        self._open: set[Future[Any]] = set()
        self._held = ExitStack()

    def __enter__(self) -> ExecutorEngine:
        self._held.enter_context(here(self._job.token, *self._kernel))
        return self

    def __exit__(
        self, kind: type[BaseException] | None, problem: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Withdraw what has not begun; the executor itself is its owner's to shut down."""
        self._withdraw()
        self._held.close()

    def call(self, task: Callable[[Bench], T], name: str = TRIAL) -> T:
        """Run one task on the executor."""
        future = self._submitted(task, None, name)
        value: T = self._result(future, name)
        return value

    def blocks(self, sizes: Mapping[Key, int]) -> Iterator[Block]:
        """Submit all blocks, the largest first, and yield them as they are finished."""
        return self.errands(map(errand_of, largest_first(sizes)))

    def errands(self, wanted: Iterable[Errand[T]]) -> Iterator[T]:
        """Submit all tasks, and yield what they come to as they are finished."""
        done: queue.SimpleQueue[Future[Any]] = queue.SimpleQueue()
        names: dict[Future[Any], str] = {}
        for one in wanted:
            name = one.name if one.level is None else f"level {one.level}, {one.name}"
            future = self._submitted(one.run, one.level, name)
            names[future] = name
            future.add_done_callback(done.put)
        failed: list[BaseException] = []
        for _ in list(names):
            try:
                future = done.get(block=not failed)
            except queue.Empty:
                break
            try:
                found = self._result(future, names.pop(future))
            except Exception as problem:  # raised when what else was finished is safe
                failed.append(problem)
                self._withdraw()
            else:
                yield found
        if failed:
            raise failed[0]

    def _submitted(self, task: Callable[[Bench], Any], level: int | None, name: str) -> Future[Any]:
        try:
            future: Future[Any] = self._executor.submit(run_task, self._job, task, level)
        except Exception as problem:  # an executor may refuse in its own words
            raise _unable(name, problem) from None
        self._open.add(future)
        return future

    def _result(self, future: Future[Any], name: str) -> Any:
        self._open.discard(future)
        try:
            reply = future.result()
        except Exception as problem:  # what the task raises is data; this is the executor's
            raise _unable(name, problem) from None
        assert isinstance(reply, Reply)  # what run_task returns
        if reply.failure is not None:
            raise reply.failure.raised()
        return reply.value

    def _withdraw(self) -> None:
        for future in list(self._open):
            future.cancel()
        self._open.clear()


def _unable(name: str, problem: Exception) -> WorkerError:
    what = f"{type(problem).__name__}: {said(problem)}".rstrip(": ")
    return WorkerError(
        f"{name}: the executor could not run it ({what}); accepted: an executor whose workers have narrowgauge "
        "installed and live until the audit is done. A kernel that ends its process shows like this, too: --workers "
        "finds the block that does"
    )


@contextmanager
def cluster(address: str) -> Iterator[tuple[Executor, int]]:
    """Connect to the scheduler of a dask cluster; yields its executor and the number of its threads.

    Raises WorkerError where dask.distributed is not installed, or nobody answers.
    """
    try:
        from distributed import Client
    except ImportError as problem:
        what = f"--cluster needs dask.distributed, which cannot be imported ({problem})"
        raise WorkerError(f"{what}; the extra cluster of narrowgauge installs it: pip install '.[cluster]'") from None
    try:
        client = Client(address, timeout=_CONNECTING, set_as_default=False)  # type: ignore[no-untyped-call]  # dask has few types
    except (OSError, ValueError, ImportError) as problem:
        what = f"--cluster {address}: no scheduler can be reached ({problem})"
        raise WorkerError(f"{what}; accepted: the address of a dask scheduler, such as tcp://host:8786") from None
    with client:
        threads = sum(client.nthreads().values())  # type: ignore[no-untyped-call]  # likewise
        if not threads:
            raise WorkerError(f"--cluster {address}: the cluster has no workers; accepted: a cluster with one or more")
        # Blocks that are asked for twice are run twice, whatever the scheduler remembers.
        yield client.get_executor(pure=False), threads  # type: ignore[no-untyped-call]  # likewise
