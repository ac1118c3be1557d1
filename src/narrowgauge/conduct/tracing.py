"""What one run computes, operation by operation, kept by value: the rows of each operand and result over the paths.

An array with an axis of the paths is kept as rows, each a vector over the paths; an array without is kept by its last
axis, a number is a row of its own, and so is a row whose values are all one number. Rows are known by their values as
float64 and never by their type, so that float16 in float16 storage and in a float32 carrier are the same rows.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from hashlib import blake2b
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.dispatch.setting import Place, Route, Setting, Way

__all__ = ["MOST_OPERATIONS", "MOST_PATHS", "MOST_ROWS", "Kept", "Key", "Operation", "Trace"]

MOST_PATHS = 256
MOST_OPERATIONS = 1 << 16
MOST_ROWS = 1 << 16  # of 256 float64: 128 MiB

_MOST_NUMBERS = 4096  # of an array without paths that count one by one, too: a grid of times, a matrix
_FEW_NUMBERS = 64  # of such an array for which it is enough that each number occurs
_STORED = frozenset(form.storage for form in FORMATS.values())  # NumPy does not know that some of them are numbers

Key = bytes  # 8 bytes of one number, or 16 of a row's digest


class Kept(NamedTuple):
    """An array or number as a trace keeps it.

    `shape` and `dtype` are those in the run, `axis` that of the paths, None where there is none. `readings` are the
    ways to cut it into rows, more than one where several axes could be that of the paths; the first is the likely one.
    """

    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    axis: int | None
    readings: tuple[tuple[Key, ...], ...]

    @property
    def keys(self) -> tuple[Key, ...]:
        """The rows of the likely reading."""
        return self.readings[0]


class Operation(NamedTuple):
    """One operation of a run. `call` repeats it in plain NumPy on operands of any shape, None where it cannot be."""

    place: Place | None
    name: str
    operands: tuple[Kept, ...]
    results: tuple[Kept, ...]
    call: Callable[..., Any] | None = None


class Trace:
    """An Observer of one run that keeps place, name, operands and result of every operation.

    `paths` is the number of paths of the run; `kept` are those of them, by number, whose values are kept and compared,
    at most MOST_PATHS, in the order in which the other trace has them: the first MOST_PATHS by default. Give more
    than a few where you can (paths that agree do no harm): rows of one or two paths of a 16-bit format are alike by
    chance. Operations past MOST_OPERATIONS, and all after the one with which MOST_ROWS different rows are there, are
    not kept: `full` is True then.

    `rows` holds the values of every key; `draws_keys` those of the draws, `constants` those of numbers that met the
    state, `made` the operations whose results have a key, in order, `returned` the rows of the quantity in question.
    `lost` is the first line, with the number of the operation there, where an array met the traced ones that varies
    over the paths and was made where no trace could see it.
    """

    def __init__(self, paths: int, kept: Sequence[int] | None = None) -> None:
        chosen = range(min(paths, MOST_PATHS)) if kept is None else kept
        if not 0 < len(chosen) <= MOST_PATHS:
            raise ValueError(f"{len(chosen)} paths are to be kept; accepted: 1 to {MOST_PATHS}")
        self.paths = paths
        self.kept: npt.NDArray[np.intp] = np.array(chosen, np.intp)
        self.operations: list[Operation] = []
        self.rows: dict[Key, npt.NDArray[np.float64]] = {}
        self.draws_keys: set[Key] = set()
        self.constants: set[Key] = set()
        self.made: dict[Key, list[int]] = {}
        self.returned: tuple[Key, ...] = ()
        self.lost: tuple[Place | None, int] | None = None
        self.full = False
        self._room = MOST_ROWS

    def draws(self, values: Any) -> None:
        """Keep the draws that the run is given, an array of any type with an axis of the paths, as its input rows."""
        kept = self.keep(values)
        if kept is not None:
            self.draws_keys.update(*kept.readings)

    def gave(self, values: Any) -> None:
        """Keep the quantity in question that the run returned, (paths,): only what leads to it is compared."""
        kept = self.keep(values)
        self.returned = () if kept is None else kept.keys

    def saw(self, setting: Setting, operation: str, route: Route, operands: Sequence[Any], result: Any) -> None:
        """Keep one operation."""
        if not self.full:
            self.add(setting.where(), operation, [self.keep(value) for value in operands], result)

    def met(self, setting: Setting, constant: Any) -> None:
        """Keep a constant, rounded as it meets the state."""
        if not self.full:
            arithmetic, array = setting.arithmetic, isinstance(constant, np.ndarray)
            kept = self.keep(arithmetic.cast(constant) if array else arithmetic.constant(constant))
            if kept is not None:
                self.constants.update(*kept.readings)

    def decided(self, setting: Setting, answer: bool) -> None:
        """Decisions are no part of the comparison."""

    def left(self, setting: Setting, way: Way) -> None:
        """Neither is what leaves."""

    def add(
        self,
        place: Place | None,
        name: str,
        operands: Sequence[Kept | None],
        result: Any,
        call: Callable[..., Any] | None = None,
    ) -> None:
        """Keep one operation whose operands are kept already; None stands for one that is not of numbers."""
        results = result if isinstance(result, (tuple, list)) else [result]
        kept = tuple(one for one in map(self.keep, results) if one is not None)
        if not kept:
            return  # it writes into an array, or asks about one
        whole = call if None not in operands else None
        number = len(self.operations)
        self.operations.append(Operation(place, name, tuple(one for one in operands if one is not None), kept, whole))
        for one in kept:
            for key in {key for reading in one.readings for key in reading}:
                self.made.setdefault(key, []).append(number)
        self.full = self.full or len(self.operations) >= MOST_OPERATIONS or self._room <= 0

    def keep(self, value: Any) -> Kept | None:
        """Return an array or number with its rows kept; None for what is no array of real numbers."""
        if not isinstance(value, (np.ndarray, np.generic, float, int)):
            return None
        array = np.array(value, copy=None, subok=False)
        if array.dtype.kind not in "biuf" and array.dtype not in _STORED:
            return None
        axes = [axis for axis, length in enumerate(array.shape) if length == self.paths]
        if self.paths == 1:
            axes = axes[-1:]
        readings = [self._rows(np.moveaxis(array, axis, -1)[..., self.kept]) for axis in reversed(axes)]
        if not axes:
            readings.append(self._rows(array))
            if array.ndim and array.size <= _MOST_NUMBERS:
                numbers = self._rows(array.reshape(-1, 1))
                if array.size <= _FEW_NUMBERS:
                    readings.append(numbers)
        return Kept(array.shape, array.dtype, axes[-1] if axes else None, tuple(readings))

    def varies(self, kept: Kept) -> bool:
        """Whether an array has the axis of the paths, and not one number along it in every row."""
        return kept.axis is not None and any(len(self.rows[key]) > 1 for key in kept.keys)

    def values(self, key: Key) -> npt.NDArray[np.float64]:
        """Return a row's values, one for each kept path where it is a row over the paths or one number."""
        row = self.rows[key]
        return np.broadcast_to(row, self.kept.shape) if len(row) == 1 else row

    def _rows(self, array: npt.NDArray[Any]) -> tuple[Key, ...]:
        with np.errstate(all="ignore"):
            wide = np.array(array, np.float64, order="C")
        wide[np.isnan(wide)] = np.nan  # of one payload
        matrix = wide.reshape(-1, wide.shape[-1] if wide.ndim else 1)
        return tuple(self._row(row) for row in matrix) if matrix.shape[-1] else ()

    def _row(self, row: npt.NDArray[np.float64]) -> Key:
        bits = row.view(np.int64)
        if (bits == bits[0]).all():
            row = row[:1]
            key = row.tobytes()
        else:
            key = blake2b(row.tobytes(), digest_size=16).digest()
        if key not in self.rows:
            self.rows[key] = row.copy()
            self._room -= 1 + row.size // MOST_PATHS
        return key
