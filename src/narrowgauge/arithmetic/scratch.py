"""Work space of each thread, kept between operations: large arrays made anew each time cost more than what fills them.

A place is an array of its own; what was put there is good until the next one who asks for it.
"""

from __future__ import annotations

import threading
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["filled32", "words32", "words64"]


class _Space(threading.local):
    def __init__(self) -> None:
        self.kept: dict[str, npt.NDArray[Any]] = {}

    def take(self, place: str, kind: Any, shape: tuple[int, ...], size: int) -> npt.NDArray[Any]:
        found = self.kept.get(place)
        if found is None or found.size < size:
            found = self.kept[place] = np.empty(max(size, 4096), kind)
        return found[:size].reshape(shape)


_SPACE = _Space()


def words32(place: str, shape: tuple[int, ...], size: int) -> npt.NDArray[np.uint32]:
    """Return a place for `size` words of 32 bits."""
    return _SPACE.take(place, np.uint32, shape, size)


def words64(place: str, shape: tuple[int, ...], size: int) -> npt.NDArray[np.uint64]:
    """Return a place for `size` words of 64 bits."""
    return _SPACE.take(place, np.uint64, shape, size)


def filled32(number: np.float32, shape: tuple[int, ...], size: int) -> npt.NDArray[np.float32]:
    """Return an array of one number, to be read only: NumPy compares two arrays much faster than one with a number."""
    place = f"filled {number}"
    known = _SPACE.kept.get(place)
    if known is None or known.size < size:
        known = _SPACE.kept[place] = np.full(max(size, 4096), number)
    return known[:size].reshape(shape)
