"""An observer that looks at the numbers of a run: magnitudes, what passes an end of the range, lost additions."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from types import CodeType
from typing import Any, Literal, NamedTuple

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import Format
from narrowgauge.dispatch.setting import Place, Route, Setting, Way

__all__ = ["LineSeen", "Nonfinite", "RangeWatch", "Seen"]

Doubles = npt.NDArray[np.float64]

_SUMS = frozenset(("add", "subtract"))
# Operations whose exact result is 0 for no finite operands other than 0.
_PRODUCTS = "multiply divide reciprocal square power float_power exp exp2 hypot"
_ODD = "arctan2 sin tan arcsin arctan sinh tanh arcsinh arctanh expm1 log1p cbrt deg2rad rad2deg degrees radians"
_NEVER_ZERO = frozenset(f"{_PRODUCTS} {_ODD}".split())
# Operations that may be too large for the format; where that operand is 0, infinity is the exact result.
_GROWING = "add subtract expm1 sinh cosh tan rad2deg degrees logaddexp logaddexp2 floor_divide"
_LARGE = frozenset(f"{_PRODUCTS} {_GROWING}".split())
_POLES = {"divide": 1, "floor_divide": 1, "reciprocal": 0, "power": 0, "float_power": 0}
_ROWS, _HELD = 32, 2**13  # runs of one place that are looked at together, and values
_REFERENCE = 53  # bits
_MAY_BE_NAN = "fmod"  # the one exact operation whose finite operands do


class Nonfinite(NamedTuple):
    """The first result of a run that is not finite."""

    place: Place | None
    operation: str
    kind: Literal["infinite", "not a number"]
    step: int
    path: int | None
    operands: tuple[float | None, ...]


@dataclass(slots=True)
class LineSeen:
    """What one operation on one line gave; `smallest` and `largest` are finite magnitudes other than 0.

    `first_lost` is how often the place in the code had run before the first lost addition. `bits` are those cancelled.
    """

    results: int = 0
    smallest: float = math.inf
    largest: float = 0.0
    overflows: int = 0
    subnormals: int = 0
    underflows: int = 0
    additions: int = 0
    lost: int = 0
    first_lost: int | None = None
    bits: int = 0
    most_bits: int = 0

    def add(self, other: LineSeen) -> None:
        """Add what another place on the same line gave."""
        self.smallest, self.largest = min(self.smallest, other.smallest), max(self.largest, other.largest)
        for name in ("results", "overflows", "subnormals", "underflows", "additions", "lost", "bits"):
            setattr(self, name, getattr(self, name) + getattr(other, name))
        self.most_bits = max(self.most_bits, other.most_bits)
        if other.first_lost is not None:
            self.first_lost = min(other.first_lost, other.first_lost if self.first_lost is None else self.first_lost)


# When a row was seen: its place in the order of the run, its step, its path, and whether the operands were finite.
_Mark = tuple[int, int, int | None, bool]


class _Site:
    """One operation at one place in compiled code: two additions on a line are told apart. `step` counts its runs.

    Results and operands are held, a row for each run, to be looked at many at a time: an operation on few paths is over
    sooner than the first of a dozen looks at it. `operands` is empty where they have other shapes than the result.
    """

    __slots__ = ("code", "kind", "marks", "operands", "operation", "place", "result", "room", "seen", "shape", "step")

    def __init__(self, code: CodeType | None, place: Place | None, operation: str) -> None:
        self.code = code  # kept alive, since its identity is a key
        self.place, self.operation = place, operation
        self.step, self.room = 0, 0
        self.seen = LineSeen()
        self.marks: list[_Mark] = []
        self.shape: tuple[int, ...] | None = None  # of each result, and its type
        self.kind: Any = None
        self.result: Any = None
        self.operands: list[Any] = []

    def make_room(self, result: Any, operands: Sequence[Any]) -> None:
        """Make rows for results like this one."""
        shape, kind = np.shape(result), result.dtype
        self.room = max(1, min(_ROWS, _HELD // max(1, result.size)))
        self.shape, self.kind = shape, kind
        self.result = np.empty((self.room, *shape), kind)
        alike = all(_spreads(np.shape(one), shape) for one in operands)
        self.operands = [np.empty((self.room, *shape), kind) for _ in operands] if alike else []


@dataclass(frozen=True, slots=True, kw_only=True)
class Seen:
    """What was seen since the last harvest: lines, the first non-finite result, and by path lost and small results.

    `lost` counts lost additions, `below` subnormal results and underflows, float64 of shape (paths,); what has no axis
    of paths counts for all of them alike. `largest_met` is the largest finite operand of a float64 run.
    """

    lines: dict[tuple[Place | None, str], LineSeen]
    first: Nonfinite | None
    lost: Doubles
    below: Doubles
    largest_met: float


class RangeWatch:
    """Looks at every operation that rounds, in runs of the format `form`; in float64 not for lost additions.

    A step is how often an operation at its place in the code ran before, in the same call. `expect` comes before the
    calls of a run, `begin` before each of them, with the path where the kernel is called for one at a time. What a
    single call adds up or multiplies out (np.sum, a product of matrices) is one operation, whose parts are not seen;
    what `where=` leaves out is computed all the same, and seen.
    """

    def __init__(self, form: Format) -> None:
        self._form = form
        self._least, self._most = form.min_normal, form.max_finite
        self._reference = form.precision == _REFERENCE
        self._path: int | None = None
        self.expect(0)

    def _clear(self) -> None:
        self._sites: dict[tuple[int, int, str], _Site] = {}
        self._first: Nonfinite | None = None
        self._first_order = 0
        self._lost, self._below = np.zeros(self._paths), np.zeros(self._paths)
        self._largest = 0.0
        self._order = 0

    def expect(self, paths: int) -> None:
        """Forget everything, and expect calls with so many paths in all."""
        self._paths = paths
        self._clear()

    def begin(self, path: int | None = None) -> None:
        """Begin to count steps anew; `path` is the only one of the call that follows."""
        self._path = path
        for site in self._sites.values():
            site.step = 0

    def harvest(self) -> Seen:
        """Return what was seen, and forget it."""
        lines: dict[tuple[Place | None, str], LineSeen] = {}
        for site in self._sites.values():
            self._look(site)
            lines.setdefault((site.place, site.operation), LineSeen()).add(site.seen)
        seen = Seen(lines=lines, first=self._first, lost=self._lost, below=self._below, largest_met=self._largest)
        self._clear()
        return seen

    def saw(self, setting: Setting, operation: str, route: Route, operands: Sequence[Any], result: Any) -> None:
        """Hold one operation; those that never round make no magnitudes that were not there."""
        if (route == "exact" and operation != _MAY_BE_NAN) or not _is_float(result):
            return
        if type(result) is float:
            result = np.float64(result)
        site = self._site(setting, operation)
        if result.shape != site.shape or result.dtype != site.kind or not self._held(site, result, operands):
            self._look(site)
            site.make_room(result, operands)
            self._held(site, result, operands)
        if len(site.marks) == site.room:
            self._look(site)

    def _held(self, site: _Site, result: Any, operands: Sequence[Any]) -> bool:
        """Copy an operation into the next rows of its site; return whether its operands fit there."""
        held, row, finite = site.operands, len(site.marks), True
        if held:
            try:
                for place, rows in enumerate(held):
                    rows[row] = operands[place]
            except (IndexError, ValueError):  # fewer, or of another shape, than those before
                return False
        else:
            finite = all(bool(np.isfinite(one).all()) for one in operands if _is_float(one))
        site.result[row] = result
        site.marks.append((self._order, site.step, self._path, finite))
        self._order += 1
        site.step += 1
        return True

    def met(self, setting: Setting, constant: Any) -> None:
        """Note how large constants are that meet the reference."""
        if not self._reference:
            return
        if type(constant) is float:  # nearly all of them
            if self._largest < abs(constant) <= self._most:
                self._largest = abs(constant)
            return
        try:
            self._note(np.asarray(constant, np.float64))
        except (OverflowError, TypeError, ValueError):  # an integer past float64, or no number
            return

    def _note(self, met: Any) -> None:
        """Note how large operands are, draws and constants among them."""
        size = np.abs(met)
        largest = float(np.max(size, initial=0.0))
        if not largest <= self._most:  # also NaN
            largest = float(np.max(size, initial=0.0, where=np.isfinite(size)))
        self._largest = max(self._largest, largest)

    def decided(self, setting: Setting, answer: bool) -> None:
        """Pass over a decision."""

    def left(self, setting: Setting, way: Way) -> None:
        """Pass over what leaves the emulation."""

    def _site(self, setting: Setting, operation: str) -> _Site:
        frame = setting.frame()
        key = (0, 0, operation) if frame is None else (id(frame.f_code), frame.f_lasti, operation)
        site = self._sites.get(key)
        if site is None:
            code = None if frame is None else frame.f_code
            site = self._sites[key] = _Site(code, setting.where(), operation)
        return site

    @np.errstate(all="ignore")
    def _look(self, site: _Site) -> None:
        """Look at what a site holds, and let go of it."""
        number, seen = len(site.marks), site.seen
        if number == 0 or site.result.size == 0:
            site.marks.clear()
            return
        result, operands = site.result[:number], [rows[:number] for rows in site.operands]
        size = np.abs(result)
        high, low = float(np.maximum.reduce(size, None)), float(np.minimum.reduce(size, None))
        if not (low >= self._least and high <= self._most):
            low, high = self._outside(site, operands, result, size)
        seen.results += size.size
        seen.smallest, seen.largest = min(seen.smallest, low), max(seen.largest, high)
        if self._reference:
            for each in operands:
                self._note(each)
        elif site.operation in _SUMS and operands:
            self._summed(site, operands, size)
        site.marks.clear()

    def _outside(self, site: _Site, operands: Sequence[Any], result: Any, size: Any) -> tuple[float, float]:
        """Count what is no normal number; return the smallest and the largest magnitude of what is left, zeros not."""
        seen, zero, finite = site.seen, size == 0, size <= self._most
        if not finite.all():
            self._nonfinite(site, operands, result, ~finite)
        below = (size < self._least) & ~zero
        seen.subnormals += int(np.count_nonzero(below))
        if site.operation in _NEVER_ZERO and operands and zero.any():
            gone = zero & _finite(operands, other_than_zero=True)
            seen.underflows += int(np.count_nonzero(gone))
            below |= gone
        if below.any():
            self._below += self._by_path(below, site)
        inside = size[finite & ~zero]
        return (float(inside.min()), float(inside.max())) if inside.size else (math.inf, 0.0)

    def _nonfinite(self, site: _Site, operands: Sequence[Any], result: Any, where: Any) -> None:
        """Count overflows, and keep the first result of the run that is not finite."""
        operation = site.operation
        if operation in _LARGE and operands:
            pole = _POLES.get(operation)
            over = where & _finite(operands)
            site.seen.overflows += int(np.count_nonzero(over if pole is None else over & (operands[pole] != 0)))
        elif not operands:
            finite = np.array([mark[3] for mark in site.marks])
            site.seen.overflows += int(np.count_nonzero((where & np.isinf(result)).T & finite))
        spot = np.unravel_index(int(np.argmax(where)), where.shape)
        order, step, path, _ = site.marks[spot[0]]
        if self._first is None or order < self._first_order:
            axis = self._axis(where.shape)
            self._first_order = order
            self._first = Nonfinite(
                place=site.place,
                operation=operation,
                kind="infinite" if np.isinf(result[spot]) else "not a number",
                step=step,
                path=path if axis is None else int(spot[axis]),
                operands=tuple(_known(one[spot]) for one in operands),
            )

    def _summed(self, site: _Site, operands: Sequence[Any], size: Any) -> None:
        """Count lost additions and cancelled bits."""
        seen = site.seen
        one, other = map(np.abs, operands)
        larger = np.maximum(one, other)
        seen.additions += size.size
        kept = size == larger
        if kept.any():
            lost = kept & (np.minimum(one, other) > 0) & (larger <= self._most)
            if number := int(np.count_nonzero(lost)):
                seen.lost += number
                self._lost += self._by_path(lost, site)
                rows = np.flatnonzero(lost.reshape(len(lost), -1).any(axis=1))
                first = min(site.marks[row][1] for row in rows)
                seen.first_lost = first if seen.first_lost is None else min(seen.first_lost, first)
        bits = _exponents(larger) - _exponents(size)
        np.clip(bits, 0, self._form.precision, out=bits)
        seen.bits += int(np.add.reduce(bits, None, dtype=np.int64))
        seen.most_bits = max(seen.most_bits, int(np.maximum.reduce(bits, None)))

    def _by_path(self, mask: Any, site: _Site) -> Doubles:
        """Return how many places of a mask, (rows, ...), are true for each path."""
        axis = self._axis(mask.shape)
        if axis is not None:
            counts: Doubles = np.sum(mask, axis=tuple(a for a in range(mask.ndim) if a != axis), dtype=np.float64)
            return counts
        if self._path is None:
            return np.full(self._paths, np.count_nonzero(mask) / self._paths)
        counts = np.zeros(self._paths)
        np.add.at(counts, [mark[2] or 0 for mark in site.marks], mask.reshape(len(mask), -1).sum(axis=1))
        return counts

    def _axis(self, shape: tuple[int, ...]) -> int | None:
        """Return the last axis as long as the paths, of rows; None without one, and for one path a call."""
        if self._path is not None:
            return None
        return next((axis for axis in reversed(range(1, len(shape))) if shape[axis] == self._paths), None)


def _is_float(value: Any) -> bool:
    return isinstance(value, float) or (isinstance(value, (np.ndarray, np.generic)) and value.dtype.kind == "f")


def _finite(operands: Sequence[Any], *, other_than_zero: bool = False) -> Any:
    """Return where all operands are finite, and not 0 where that is asked."""
    found: Any = True
    for operand in operands:
        found = found & np.isfinite(operand)
        if other_than_zero:
            found = found & (operand != 0)
    return found


def _exponents(size: Any) -> Any:
    """Return the exponents of magnitudes; of 0, and of what is subnormal in the carrier, one less than the smallest."""
    if size.dtype == np.float32:
        return (size.view(np.int32) >> 23) - 127
    return (size.view(np.int64) >> 52) - 1023


def _known(value: Any) -> float | None:
    return float(value) if math.isfinite(value) else None


def _spreads(shape: tuple[int, ...], over: tuple[int, ...]) -> bool:
    """Whether NumPy spreads one shape over another without changing that."""
    try:
        return np.broadcast_shapes(shape, over) == over
    except ValueError:
        return False
