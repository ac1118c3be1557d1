"""The draws of a kernel that takes one path a call: the columns of a run's rows, each row drawn once for all paths."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from narrowgauge.draws.layout import Request
from narrowgauge.draws.tape import Drawn, Reader

__all__ = ["Columns", "across"]


def across(values: tuple[Any, ...], parameters: int, row: int | None = None) -> tuple[Any, ...]:
    """Return what one path gives with a request, so that its arrays broadcast against a row of paths, which share them.

    The first values are the `parameters` of the distribution, tables follow. Arrays of shape (row,) have a value for
    each path already.
    """
    shared = (value[..., np.newaxis] if np.shape(value) not in ((), (row,)) else value for value in values[:parameters])
    return (*shared, *values[parameters:])


class Columns:
    """A reader that gives the paths of a run their draws one after the other; the last axis of a row is the paths'."""

    def __init__(self, rows: Reader, paths: int) -> None:
        self.position = 0
        self._rows, self._paths, self._path = rows, paths, 0
        self._drawn: list[tuple[Request, tuple[Any, ...], Drawn]] = []

    def begin(self, path: int) -> None:
        """Go on with the first request of a path."""
        self._path, self.position = path, 0

    def draw(self, request: Request, values: tuple[Any, ...]) -> Drawn:
        """Return the draws of the path's next request; raises as the reader of rows does."""
        place, of_all = self.position, replace(request, size=(*request.size, self._paths))
        self.position += 1
        count = len(request.parameters)
        if place == len(self._drawn):
            drawn = self._rows.draw(of_all, across(values, count))
            self._drawn.append((of_all, values[count:], drawn))
        else:
            asked, tables, drawn = self._drawn[place]
            same = all(map(np.array_equal, tables, values[count:]))
            if asked != of_all or None in request.parameters or not same:  # another kind, or parameters of its own
                return self._rows.column(place, of_all, values, self._path)
        return np.array(drawn[..., self._path])

    def column(self, place: int, request: Request, values: tuple[Any, ...], path: int) -> Drawn:
        """Return one path's draws, as the reader of rows does."""
        return self._rows.column(place, request, values, path)

    def ended(self, path: int, count: int) -> None:
        """Let the reader of rows take note."""
        self._rows.ended(path, count)

    def finish(self) -> None:
        """Tell the reader of rows how often the path asked; it may have stopped before others."""
        self._rows.ended(self._path, self.position)
