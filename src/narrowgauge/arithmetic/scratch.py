"""Work space of each thread, kept between operations: large arrays made anew each time cost more than what fills them.

A place is an array of its own; what was put there is good until the next one who asks for it.
"""

from __future__ import annotations

import threading
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["filled32", "words32", "words64"]

_MOST_SHAPES = 256


class _Space(threading.local):
    def __init__(self) -> None:
        self.kept: dict[str, npt.NDArray[Any]] = {}
        self.shaped: dict[tuple[str, tuple[int, ...]], npt.NDArray[Any]] = {}  # parts of them, as they were asked for

    def take(self, place: str, kind: Any, shape: tuple[int, ...], size: int) -> npt.NDArray[Any]:
        known = self.shaped.get((place, shape))
        if known is not None:
            return known
        found = self.kept.get(place)
        larger = found is None or found.size < size
        if found is None or larger:
            found = self.kept[place] = np.empty(max(size, 4096), kind)
        if larger or len(self.shaped) > _MOST_SHAPES:
            self.shaped.clear()  # none may keep a smaller array alive
        self.shaped[place, shape] = found[:size].reshape(shape)
        return self.shaped[place, shape]


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
