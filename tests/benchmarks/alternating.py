"""Ratios of things that are timed in turn, A B C A B C ..., so that whatever slows the machine slows all of them."""

from __future__ import annotations

import gc
import math
import time
from collections.abc import Callable, Mapping, Sequence

__all__ = ["PINNED", "alternated", "ratios"]

# For processes that are started: threadpoolctl pins those of the process that it is called in.
PINNED = {f"{name}_NUM_THREADS": "1" for name in ("OMP", "OPENBLAS", "MKL", "NUMBA")}


def alternated(tasks: Mapping[str, Callable[[], object]], rounds: int, least: float = 0.0) -> dict[str, list[float]]:
    """Return seconds per call of each task, one figure a round; every round runs all tasks in order.

    A task is called as often in a row as takes about `least` seconds. One round goes before, which is not counted: what
    is compiled, cached or imported at the first call is done then.
    """
    calls = dict.fromkeys(tasks, 1)
    for name, task in tasks.items():
        task()
        calls[name] = max(1, math.ceil(least / _seconds(task, 1))) if least else 1
    found: dict[str, list[float]] = {name: [] for name in tasks}
    for _ in range(rounds):
        gc.collect()
        for name, task in tasks.items():
            found[name].append(_seconds(task, calls[name]))
    return found


def ratios(above: Sequence[float], below: Sequence[float]) -> list[float]:
    """Return the ratios round by round."""
    return [a / b for a, b in zip(above, below, strict=True)]


def _seconds(task: Callable[[], object], calls: int) -> float:
    gc.disable()
    try:
        start = time.perf_counter()
        for _ in range(calls):
            task()
        return (time.perf_counter() - start) / calls
    finally:
        gc.enable()
