"""Where the stand-in generators of one private copy get their numbers from: the reader of the run that is on.

All generators of a copy draw from one tape, request by request, whatever their seed. Plain NumPy would give two
generators of one seed, or a generator and its copy, the same numbers: where both draw, that is refused.
"""

from __future__ import annotations

import itertools
import operator
import sys
import weakref
from collections.abc import Hashable, Iterator
from contextlib import contextmanager
from pathlib import Path
from types import FrameType
from typing import Any

import numpy as np

from narrowgauge.dispatch.scalar import State, plain_item
from narrowgauge.dispatch.setting import Place, Setting, Wrapped, holds
from narrowgauge.draws.columns import across
from narrowgauge.draws.layout import Request
from narrowgauge.draws.tape import Reader, TapeError
from narrowgauge.errors import DispatchError, RefusedError

__all__ = ["Feed", "Line", "family_of", "feed_of"]

_HOME = str(Path(__file__).parents[1])
_SERIALS, _FAMILIES = itertools.count(1), itertools.count(1)
_ALIVE: weakref.WeakValueDictionary[int, Feed] = weakref.WeakValueDictionary()  # what a pickled generator finds again


class Line:
    """The numbers of one generator; `family` is shared by those whose numbers plain NumPy repeats.

    `born` says in which run, and after how many requests, the line was made.
    """

    __slots__ = ("born", "family")

    def __init__(self, family: Hashable, born: tuple[int, int] = (0, 0)) -> None:
        self.family, self.born = family, born


class Feed:
    """The random numbers of one private copy: None of a setting for plain NumPy, a reader while a run is on."""

    __slots__ = (
        "__weakref__", "_drawn", "_reader", "_row", "_run",
        "faults", "kinds", "problem", "remarks", "serial", "setting",
    )  # fmt: skip  # two rows

    def __init__(self) -> None:
        self.serial = next(_SERIALS)
        self.setting: Setting | None = None
        self.kinds: dict[str, Any] = {}  # the classes of its generators, by NumPy's name
        self.remarks: dict[tuple[Place | None, str], None] = {}
        self.faults: list[DispatchError] = []
        self.problem: TapeError | None = None
        self._reader: Reader | None = None
        self._row: int | None = None
        self._run = 0
        self._drawn: dict[Hashable, dict[Line, int]] = {}
        _ALIVE[self.serial] = self

    @contextmanager
    def run(self, reader: Reader, row: int | None = None) -> Iterator[None]:
        """Serve the draws of one run; for a `row` of paths where the kernel asks for those of one.

        Raises TapeError where the kernel asked for other numbers than it should, and what was refused, also where the
        kernel swallowed it.
        """
        self._reader, self._row, self.problem = reader, row, None
        self._run += 1
        self._drawn.clear()
        self.faults.clear()
        try:
            yield
            if self.problem is None and not self.faults:
                reader.finish()
        finally:
            self._reader = None
            if self.faults:
                raise self.faults[0]
            if self.problem is not None:
                raise self.problem

    def fault(self, message: str) -> DispatchError:
        """Record a refusal and return it, to be raised."""
        if self.setting is not None:
            return self.setting.fault(RefusedError, message)
        place = self.where()
        error = RefusedError(f"{place}: {message}" if place else message)
        self.faults.append(error)
        return error

    def where(self) -> Place | None:
        """Return the innermost line of the user's modules, or under plain NumPy the innermost that is not ours."""
        if self.setting is not None:
            return self.setting.where()
        frame: FrameType | None = sys._getframe(1)
        while frame is not None and frame.f_code.co_filename.startswith(_HOME):
            frame = frame.f_back
        return None if frame is None else Place(frame.f_code.co_filename, frame.f_lineno)

    def remark(self, text: str) -> None:
        """Note what the audit has to say about the kernel's random numbers, once for each line."""
        self.remarks[self.where(), text] = None

    def line(self, family: Hashable = None) -> Line:
        """Return the line of a new generator; without a family its numbers are its own."""
        return Line(next(_FAMILIES) if family is None else family)

    def copied(self, line: Line, born: tuple[int, int] | None = None) -> Line:
        """Return the line of a generator's copy, which plain NumPy would let repeat what the original draws next."""
        self.remark("a generator is copied: the copy draws further numbers of the same tape")
        return Line(line.family, born or self.now())

    def now(self) -> tuple[int, int]:
        """Return the number of the run, and of the requests made in it."""
        return self._run, 0 if self._reader is None else self._reader.position

    def take(
        self,
        line: Line,
        name: str,
        size: Any,
        parameters: tuple[Any, ...] = (),
        *,
        others: tuple[Any, ...] = (),
        tables: tuple[Any, ...] = (),
    ) -> Any:
        """Return draws of a row of QUANTILES as plain code has them: an array of the state, or a 0-d value.

        `others` are the location and scale that will meet the draws: with a size of None all of them decide it.
        `tables` are further parameters, which have no part in the size.
        """
        if self._reader is None:
            raise self.fault(
                f"{name} is drawn while the module is executed, before a path begins; accepted: draws inside the kernel"
            )
        given = [self._parameter(parameter, name) for parameter in parameters]
        shapes = [np.shape(value) for value, _ in given] + [self.shape_of(one) for one in others]
        values = (*(value for value, _ in given), *tables)
        if self._row is None:
            shape = self._shape(size, shapes)
        else:  # what has a value for each path is one value to the kernel
            shape = (*self._shape(size, [() if one == (self._row,) else one for one in shapes]), self._row)
            values = across(values, len(given), self._row)
        self._check(line)
        request = Request(name=name, size=shape, parameters=tuple(key for _, key in given))
        try:
            drawn = self._reader.draw(request, values)
        except TapeError as problem:
            place = self.where()
            self.problem = TapeError(f"{place}: {problem}" if place else str(problem))
            raise self.problem from None
        return self.held(drawn, scalar=size is None and shape == ())

    def held(self, drawn: Any, *, scalar: bool) -> Any:
        """Return carriers or whole numbers as plain code holds them; a scalar is a Python number there."""
        if scalar:
            item = np.asarray(drawn)[()]
            item = item.item() if self.setting is None or item.dtype.kind == "i" else plain_item(item)
            return item if self.setting is None else self.setting.wrap(item)
        return drawn if self.setting is None else self.setting.wrap(drawn)

    def constants(self, value: Any) -> Any:
        """Return entries of a plain table that were drawn, an array or one of them, as constants of the state."""
        if self.setting is None or isinstance(value, Wrapped):
            return value
        if np.asarray(value).dtype.kind == "f":
            return self.setting.wrap(self.setting.arithmetic.cast(np.asarray(value))[()])
        return self.setting.wrap(value)

    def bare(self, value: Any) -> Any:
        """Return a value as plain numbers, not rounded: the carrier of a wrapped one."""
        if isinstance(value, Wrapped):
            assert self.setting is not None  # there is none without a setting
            return self.setting.carrier(value)
        if isinstance(value, (list, tuple)) and holds(value, Wrapped):
            raise self.fault("a list of values of the state as a parameter of a draw; accepted: np.array(list)")
        return value

    def shape_of(self, value: Any) -> tuple[int, ...]:
        """Return the shape of a parameter."""
        return np.shape(self.bare(value))

    def _shape(self, size: Any, shapes: list[tuple[int, ...]]) -> tuple[int, ...]:
        together = np.broadcast_shapes(*shapes)
        if size is None:
            return together
        wanted = tuple(map(operator.index, size)) if np.iterable(size) else (operator.index(size),)
        if min(wanted, default=0) < 0:
            raise ValueError("negative dimensions are not allowed")
        if np.broadcast_shapes(wanted, together) != wanted:
            raise ValueError(f"Output size {wanted} is not compatible with broadcast dimensions of inputs {together}.")
        return wanted

    def _parameter(self, value: Any, name: str) -> tuple[Any, float | None]:
        """Return a parameter as a float or a float64 array, and as the plain number that runs must agree on."""
        number = self.bare(value)
        if isinstance(value, State):
            self.remark(f"a parameter of {name} depends on the state: the draw is computed in float64 from its value")
        found = np.asarray(number, np.float64)
        if found.ndim:
            return found, None
        return float(found), None if isinstance(value, Wrapped) else float(found)

    def _check(self, line: Line) -> None:
        """Refuse a draw that in plain NumPy repeats a number which another generator has drawn in this run."""
        drawn = self._drawn.setdefault(line.family, {})
        for other, last in drawn.items():
            if other is not line and last >= max(self._since(line), self._since(other)):
                raise self.fault(
                    "two generators of one seed, or a generator and its copy, draw in one run: plain NumPy gives both "
                    "the same numbers, the draws of an audit are not repeated; accepted: one generator, other seeds"
                )
        drawn[line] = self.now()[1]

    def _since(self, line: Line) -> int:
        """Return from which request of this run on a line repeats what its family draws."""
        run, position = line.born
        return position if run == self._run else 0


def family_of(kind: str, seed: Any) -> Hashable:
    """Return what the generators of one kind share whose seeds make them draw the same numbers; None without a seed."""
    if isinstance(seed, np.random.SeedSequence):
        entropy: Any = seed.entropy
        entropy = tuple(map(int, entropy)) if np.iterable(entropy) else entropy
        return kind, entropy, tuple(seed.spawn_key)
    if seed is None or isinstance(seed, Wrapped):
        return None
    return kind, tuple(np.asarray(seed).ravel().tolist()) if np.iterable(seed) else operator.index(seed), ()


def feed_of(serial: int) -> Feed:
    """Return the feed that a pickled generator belongs to; RefusedError in another process, or when it is gone."""
    feed = _ALIVE.get(serial)
    if feed is None:
        raise RefusedError(
            "a pickled generator is loaded in another process, or after its run; accepted: inside the same run"
        )
    return feed
