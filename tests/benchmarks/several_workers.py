"""Two workers against one: processes of the program's own, and a dask cluster on this machine.

Workers are started anew by every audit, the cluster once. All of them must give the same record, provenance aside.
"""

from __future__ import annotations

import math
import os
import time
from collections.abc import Callable, Mapping
from contextlib import ExitStack
from functools import partial
from typing import Any

from alternating import alternated, ratios
from benchmark_figures import Section, at_least, figure_of
from benchmark_sizes import Size
from timed_kernels import KERNELS
from whole_audit import audit_tables

import narrowgauge
from narrowgauge.errors import NarrowgaugeError

__all__ = ["several_workers"]

KERNEL = "stochastic volatility"
SERIAL, PROCESSES, DASK = "one worker", "two processes", "two dask workers"
ASKED = 1.7
MOST_GROWTH = 8  # times the paths of the try before: of a short audit a good part is start-up

Run = Callable[[Mapping[str, Any]], narrowgauge.Audit]


def several_workers(size: Size) -> Section:
    """Return one worker over two, on an audit that takes as long as `size` says with one."""
    section = Section()
    with ExitStack() as stack:
        runs: dict[str, Run] = {
            SERIAL: partial(narrowgauge.audit, quiet=True),
            PROCESSES: partial(narrowgauge.audit, quiet=True, workers=2),
        }
        try:
            runs[DASK] = partial(narrowgauge.audit, quiet=True, executor=_cluster(stack))
        except ImportError:
            section.notes.append(f"{DASK} are left out: distributed is not installed (extra: cluster)")
        _check_the_same(section, runs, audit_tables(KERNELS[KERNEL], size.finest, size.paths))
        tables = _long_enough(size)
        taken = alternated({name: partial(run, tables) for name, run in runs.items()}, size.slow_rounds)
    for name in (PROCESSES, DASK):
        if name in taken:
            values = ratios(taken[SERIAL], taken[name])
            section.figures.append(figure_of(values, SERIAL, name, kernel=KERNEL, asked=at_least(ASKED)))
    section.notes.append(
        f"levels 0 to {size.finest}, {tables['sampling']['paths']:,} paths a level, at least {size.worker_seconds:g} s "
        f"alone; {os.cpu_count()} processors"
    )
    return section


def _long_enough(size: Size) -> dict[str, Any]:
    """Return an audit that takes `size.worker_seconds` or more with one worker."""
    paths = size.paths
    while True:
        tables = audit_tables(KERNELS[KERNEL], size.finest, paths)
        start = time.perf_counter()
        narrowgauge.audit(tables, quiet=True)
        seconds = time.perf_counter() - start
        if seconds >= size.worker_seconds:
            return tables
        paths *= min(MOST_GROWTH, max(2, math.ceil(1.1 * size.worker_seconds / seconds)))


def _cluster(stack: ExitStack) -> Any:
    """Return the executor of a dask cluster of two workers, one thread each, that ends with the stack."""
    import dask
    from distributed import Client, LocalCluster

    # Left as it is, glibc gives memory back after every array: the workers were half as fast, and so was, with that in
    # the environment of this process, all that is started after them.
    stack.enter_context(dask.config.set({"distributed.nanny.pre-spawn-environ": {}}))
    cluster = stack.enter_context(LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=None))
    return stack.enter_context(Client(cluster)).get_executor(pure=False)


def _check_the_same(section: Section, runs: dict[str, Run], tables: Mapping[str, Any]) -> None:
    """Take away the runs that this version refuses; make sure that the others give the record of one worker."""
    wanted = _document(runs[SERIAL](tables))
    for name in [name for name in runs if name != SERIAL]:
        try:
            found = _document(runs[name](tables))
        except NarrowgaugeError as problem:
            section.notes.append(f"{name} are left out: {problem}")
            del runs[name]
            continue
        if found != wanted:
            raise AssertionError(f"{name} gave another record than {SERIAL}")


def _document(audit: narrowgauge.Audit) -> dict[str, Any]:
    document: dict[str, Any] = audit.record.document()
    return {key: value for key, value in document.items() if key != "provenance"}
