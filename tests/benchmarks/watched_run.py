"""A run in which every number is looked at, over the kernel in plain NumPy, on the few paths that an audit takes."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
from alternating import alternated, ratios
from benchmark_figures import Section, at_most, figure_of
from benchmark_sizes import Size
from timed_kernels import KERNELS, PathKernel

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.conduct.ranges import PATHS
from narrowgauge.conduct.rangewatch import RangeWatch
from narrowgauge.draws.streams import Purpose
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.calls import Caller

__all__ = ["watched_run"]

FORMATS = ("float16", "bfloat16", "float32", "float64")
PLAIN = "plain float64"
UNSEEN = "itself, not looked at"
ASKED = 15.0

Task = Callable[[], Any]


def watched_run(size: Size) -> Section:
    """Return the watched run of each format over plain NumPy and over the same run without the watch."""
    section = Section()
    with np.errstate(all="ignore"):
        for name, kernel in KERNELS.items():
            tasks = _tasks(kernel, size.watched_steps)
            seconds = alternated(tasks, size.rounds, size.least)
            for form in FORMATS:
                values = ratios(seconds[form], seconds[PLAIN])
                section.figures.append(figure_of(values, form, PLAIN, kernel=name, asked=at_most(ASKED)))
            for form in FORMATS:
                values = ratios(seconds[form], seconds[_unseen(form)])
                section.figures.append(figure_of(values, form, UNSEEN, kernel=name))
    return section


def _tasks(kernel: PathKernel, steps: int) -> dict[str, Task]:
    ladder = {"horizon": 1.0, "coarsest_steps": steps, "finest": 0}
    file = audit_file_from({**kernel.tables(), "ladder": ladder})
    source = find_kernel(file)
    runner = BlockRunner(file, source)
    draws = runner.draws(0, 0, Purpose.IDENTITY, PATHS)
    plain = Caller(file, source, None)
    tasks: dict[str, Task] = {PLAIN: partial(plain.fine, draws, 0)}
    for form in FORMATS:
        arithmetic = arithmetic_named(form)
        watch = RangeWatch(arithmetic.format)
        tasks[_unseen(form)] = partial(runner.caller(arithmetic).fine, draws, 0)
        tasks[form] = partial(_watched, watch, runner.caller(arithmetic, watch), draws)
    return tasks


def _unseen(form: str) -> str:
    return f"{form}, not looked at"


def _watched(watch: RangeWatch, caller: Caller, draws: Any) -> None:
    watch.expect(PATHS)
    watch.begin()
    caller.fine(draws, 0)
    watch.harvest()
