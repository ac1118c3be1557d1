"""A kernel alone, its draws already rounded: each format through the emulation over plain NumPy in float64.

Beside it NumPy's own float16 and ml_dtypes' bfloat16, run by plain NumPy on arrays of these types, and at which block
plain float64 is fastest per path. As a program it prints the figures, for a run without compiled code.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Callable
from functools import partial
from importlib.util import find_spec
from typing import Any

import ml_dtypes
import numpy as np
from alternating import PINNED, alternated, ratios
from benchmark_figures import Section, at_least, at_most, figure_of
from benchmark_sizes import SIZES, Size
from threadpoolctl import threadpool_limits
from timed_kernels import KERNELS, PathKernel

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.array import as_state
from narrowgauge.draws.coarsen import Draws, fine_draws
from narrowgauge.draws.streams import Purpose, uniforms
from narrowgauge.kernel.auditfile import AuditFile, audit_file_from
from narrowgauge.kernel.contract import arranged
from narrowgauge.kernel.loading import find_kernel, private_copy

__all__ = ["kernel_alone", "kernel_alone_uncompiled"]

FORMATS = ("float16", "bfloat16", "float32", "float64")
OWN = {"float16": ("NumPy's float16", np.dtype(np.float16)), "bfloat16": ("ml_dtypes", np.dtype(ml_dtypes.bfloat16))}
PLAIN = "plain float64"
BLOCK = 32768  # the one that bounds were asked for
ASKED = {
    ("compiled", "stochastic volatility"): {"float16": 1.2, "bfloat16": 1.0, "float32": 0.8},
    ("compiled", "one factor"): {"float16": 1.5, "bfloat16": 1.3, "float32": 0.9},
    ("NumPy", "stochastic volatility"): {"float16": 5.0, "bfloat16": 2.5},
    ("NumPy", "one factor"): {"float16": 5.0, "bfloat16": 2.5},
}
FASTER_THAN_OWN = 10.0  # float16, on the kernels above

Task = Callable[[], Any]


def kernel_alone(size: Size) -> Section:
    """Return the figures of every kernel and block, with compiled roundings if numba is there."""
    section, compiled = Section(), _roundings() == "compiled"
    if find_spec("numba") is None:
        section.notes.append("numba is not installed: NumPy does the roundings")
    for kernel in KERNELS:
        with np.errstate(all="ignore"):
            for block in size.blocks:
                _measure(section, kernel, block, size)
            if compiled:
                _block_of_plain(section, kernel, size)
    return section


def kernel_alone_uncompiled(size: Size) -> Section:
    """Return the figures of the formats in a process where NumPy rounds."""
    command = [sys.executable, __file__, size.name]
    environment = {**os.environ, **PINNED, "NARROWGAUGE_COMPILED": "0"}
    done = subprocess.run(command, env=environment, stdout=subprocess.PIPE, text=True, check=True)
    return Section.read(json.loads(done.stdout))


def _roundings() -> str:
    off = os.environ.get("NARROWGAUGE_COMPILED") == "0" or find_spec("numba") is None
    return "NumPy" if off else "compiled"


def _measure(section: Section, name: str, block: int, size: Size) -> None:
    """Add what is known of one kernel at one block: all formats in turn with plain float64."""
    kernel, how = KERNELS[name], _roundings()
    file, drawn = _file(kernel, size.steps), _drawn(kernel, size.steps, block)
    tasks = {PLAIN: _plain(kernel, file, drawn, np.dtype(np.float64))}
    tasks |= {form: _emulated(file, drawn, form) for form in FORMATS}
    if how == "compiled":
        for form, (own, dtype) in OWN.items():
            task = _plain(kernel, file, drawn, dtype)
            if task().dtype == dtype:
                tasks[own] = task
            elif block == size.blocks[0]:
                section.notes.append(f"{name}: plain NumPy leaves {form} on the way, so that {own} is left out")
    seconds = alternated(tasks, size.rounds, size.least)
    asked = ASKED.get((how, name), {}) if block == BLOCK else {}
    place = {"kernel": name, "block": block}
    for form in FORMATS:
        values = ratios(seconds[form], seconds[PLAIN])
        section.figures.append(figure_of(values, form, PLAIN, asked=at_most(asked.get(form)), **place))
    for form, (own, _) in OWN.items():
        if own in seconds:
            bound = at_least(FASTER_THAN_OWN) if asked and form == "float16" else None
            values = ratios(seconds[own], seconds[form])
            section.figures.append(figure_of(values, own, form, asked=bound, **place))


def _block_of_plain(section: Section, name: str, size: Size) -> None:
    """Add plain float64 per path at every block over the one of 32,768, the same number of paths in all."""
    kernel, most = KERNELS[name], max(size.blocks)
    file = _file(kernel, size.steps)
    tasks = {}
    for block in size.blocks:
        parts = [_plain(kernel, file, _drawn(kernel, size.steps, block, part), np.dtype(np.float64))
                 for part in range(most // block)]  # fmt: skip
        tasks[str(block)] = partial(_in_turn, parts)
    base = str(BLOCK if BLOCK in size.blocks else most)
    seconds = alternated(tasks, size.rounds, size.least)
    for block in size.blocks:
        values = ratios(seconds[str(block)], seconds[base])
        over = f"itself at {int(base):,}"
        section.figures.append(figure_of(values, f"{PLAIN}, a path", over, kernel=name, block=block))
    fastest = min(size.blocks, key=lambda block: float(np.median(ratios(seconds[str(block)], seconds[base]))))
    section.notes.append(f"{name}: plain float64 is fastest per path in blocks of {fastest:,}")


def _file(kernel: PathKernel, steps: int) -> AuditFile:
    return audit_file_from({**kernel.tables(), "ladder": {"horizon": 1.0, "coarsest_steps": steps, "finest": 0}})


def _drawn(kernel: PathKernel, steps: int, paths: int, block: int = 0) -> Draws:
    values = uniforms(1, Purpose.TRIAL, 0, block, (steps, kernel.factors, paths))
    return Draws.of(kernel.takes, values, 1.0 / steps, 2)


def _plain(kernel: PathKernel, file: AuditFile, drawn: Draws, dtype: np.dtype[Any]) -> Task:
    """Return a call of the kernel under plain NumPy, draws and parameters in arrays of a type."""
    keywords = {name: value.astype(dtype) if isinstance(value, np.ndarray) else value
                for name, value in file.keywords().items()}  # fmt: skip
    draws = arranged(drawn.values, file.kernel.layout).astype(dtype)
    return partial(kernel.function, draws, file.ladder.step_size(0), **keywords)


def _emulated(file: AuditFile, drawn: Draws, name: str) -> Task:
    """Return a call of a private copy on draws that were rounded before; raises what such a run found wrong."""
    copy = private_copy(find_kernel(file), arithmetic_named(name))
    setting = copy.setting
    assert setting is not None  # in an arithmetic
    setting.paths = drawn.values.shape[-1]
    draws = copy.own(arranged(fine_draws(drawn, setting.arithmetic), file.kernel.layout))
    keywords = {name: as_state(value, setting) for name, value in file.keywords().items()}
    task = partial(copy.function, draws, file.ladder.step_size(0), **keywords)
    task()
    if setting.faults:
        raise setting.faults[0]
    return task


def _in_turn(parts: list[Task]) -> None:
    for part in parts:
        part()


if __name__ == "__main__":
    with threadpool_limits(limits=1):
        print(json.dumps(kernel_alone(SIZES[sys.argv[1]]).document()))
