"""Which engine an audit gets: this process, processes of its own, an executor, or a cluster."""

from __future__ import annotations

import secrets
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

from narrowgauge.errors import WorkerError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import KernelSource
from narrowgauge.measure.engines import Engine, SerialEngine
from narrowgauge.measure.task import job_for

__all__ = ["Workers", "engine_for"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Workers:
    """Who does the work: `number` processes, `executor`, or the dask cluster at the address `cluster`.

    `timeout` is the time limit of a block in seconds, or None; to be able to end a block that is past it, even a single
    worker is then a process of its own, as always for a kernel that is a library or a command. Raises WorkerError for
    what does not go together.
    """

    number: int = 1
    timeout: float | None = None
    executor: Any = None
    cluster: str | None = None

    def __post_init__(self) -> None:
        if not isinstance(self.number, int) or isinstance(self.number, bool) or self.number < 1:
            raise WorkerError(f"audit: workers = {self.number!r} is not accepted; accepted: an integer of 1 or more")
        if self.executor is None:
            return
        if not callable(getattr(self.executor, "submit", None)):
            what = f"audit: executor = {self.executor!r} has no submit"
            raise WorkerError(f"{what}; accepted: an executor of concurrent.futures, or one of its kind")
        if self.number != 1:
            what = f"audit: workers = {self.number!r} and an executor, which has workers of its own"
            raise WorkerError(f"{what}; accepted: one of the two")


@contextmanager
def engine_for(file: AuditFile, kernel: KernelSource, workers: Workers) -> Iterator[Engine]:
    """Start an engine, and stop it and all its workers in the end.

    Raises WorkerError where they cannot be had, AuditFileError where the kernel cannot travel to them.
    """
    token = secrets.token_hex(8)
    if workers.cluster is not None:
        from narrowgauge.measure.remote import ExecutorEngine, cluster

        with cluster(workers.cluster) as (executor, threads):
            title = f"dask cluster of {threads} threads"
            with ExecutorEngine(file, kernel, executor, token, workers=threads, title=title) as engine:
                yield engine
    elif workers.executor is not None:
        if file.foreign and isinstance(workers.executor, ThreadPoolExecutor):
            what = f"audit: {workers.executor!r} would run {file.kernel.run} in this process, which it may take with it"
            raise WorkerError(f"{what}; accepted: workers, or an executor of processes")
        from narrowgauge.measure.remote import ExecutorEngine

        with ExecutorEngine(file, kernel, workers.executor, token) as engine:
            yield engine
    elif workers.number > 1 or workers.timeout is not None or file.foreign:
        from narrowgauge.measure.processes import ProcessEngine

        with ProcessEngine(job_for(file, kernel, token), workers.number, workers.timeout) as processes:
            yield processes
    else:
        with SerialEngine(file, kernel) as serial:
            yield serial
