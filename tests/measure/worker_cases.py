"""A kernel in trouble, and engines to run it on, for the tests beside this file."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

from block_cases import file_for, written

from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.processes import ProcessEngine
from narrowgauge.measure.task import Bench, Key, job_for

# `how` says for each level, between commas, what the kernel does there; "once" does it while there is a file `flag`.
TROUBLED = """
import ctypes
import os
import sys
import time

import numpy as np


kept = []


def value(dW, h, *, how="", flag=""):
    trouble(how.split(",")[dW.shape[0] // 2], flag)
    x = np.ones(dW.shape[1])
    for n in range(dW.shape[0]):
        x = x + 0.05 * h * x + 0.2 * x * dW[n]
    return x


def trouble(how, flag):
    if how.startswith("once"):
        how = "segfault" if os.path.exists(flag) else how.removeprefix("once").strip()
        if os.path.exists(flag):
            os.remove(flag)
    if how == "raise":
        raise ValueError("no luck")
    if how == "exit":
        sys.exit(0)
    if how == "interrupt":
        raise KeyboardInterrupt
    if how == "segfault":
        ctypes.string_at(0)
    if how == "leave":
        os._exit(0)
    if how == "hang":
        time.sleep(600)
    if how == "fork and hang":
        os.fork()
        time.sleep(600)
    if how == "fork":
        os.fork()  # and let both go on
    if how == "fork and write":
        child = os.fork() == 0
        kept.extend(open(f"{flag}.{number}", "wb") for number in range(20 * child))  # whatever numbers they get
    if how == "close":
        sys.stdout.close()
    if how == "none":
        sys.stdout = None
    if how == "print":
        print("printed")
        print(sys.stdin.read(), end="")
"""
_LINES = TROUBLED.strip().splitlines()
CRASHES = _LINES.index("        ctypes.string_at(0)") + 1
CALLS = next(number for number, line in enumerate(_LINES, 1) if "trouble(how.split" in line)
SIZES: dict[Key, int] = {(level, block): 4 - level for level in (0, 1, 2) for block in (0, 1)}


def engine_for(folder: Path, how: str, workers: int = 1, timeout: float | None = None) -> ProcessEngine:
    """Worker processes for a kernel in trouble; levels 0 to 2 of 1, 2 and 4 steps, not coupled."""
    flag = folder / "flag"
    flag.touch()
    asked = {"how": how, "flag": str(flag)}
    tables = {"parameters": asked, "kernel": {"coupling": "none"}}
    file = file_for(written(folder, TROUBLED), tables)
    return ProcessEngine(job_for(file, find_kernel(file), "token"), workers, timeout)


def blocks_until(
    engine: ProcessEngine, levels: Sequence[int] = (0, 1, 2)
) -> tuple[list[Key], set[str], BaseException | None]:
    """The keys of all blocks of these levels that were finished, their fingerprints, and what was raised in the end."""
    found, fingerprints = [], set()
    try:
        for block in engine.blocks({key: size for key, size in SIZES.items() if key[0] in levels}):
            found.append((block.level, block.block))
            fingerprints.add(block.fingerprint)
    except Exception as problem:  # what it is, is the test
        return found, fingerprints, problem
    return found, fingerprints, None


def handed(bench: Bench) -> str | None:
    """What a worker has in its environment of how to give memory back; a task."""
    return os.environ.get("MALLOC_TRIM_THRESHOLD_")


def finest(bench: Bench) -> int:
    """A task: the finest level."""
    return bench.file.ladder.finest


def process(bench: Bench) -> int:
    """A task: the number of the process that does it."""
    return os.getpid()
