"""The tape: what a block's fine reference run asked for, in order, and the draws that every other run gets for it.

| draws                           | fine, arm a               | coarse, arm a                                          |
|---------------------------------|---------------------------|--------------------------------------------------------|
| normal                          | round(z)                  | sum of M rounded draws in the arm's arithmetic, in     |
|                                 |                           | order of time, times round(1 / sqrt(M))                |
| uniform                         | round(u); 0 and 1 become  | round(Phi((z_1 + ... + z_M) / sqrt(M))), likewise      |
|                                 | the nearest value inside  |                                                        |
| poisson, gamma, whose parameter | counts; round(g)          | sum of M counts; of M rounded draws in the arm's       |
| is the sum of the fine ones     |                           | arithmetic, in order of time                           |
| every other one                 | round(quantile(u))        | round(quantile(Phi((z_1 + ... + z_M) / sqrt(M))))      |

u are the block's uniforms, request by request, and z their normals. Whole numbers are exact.
"""

from __future__ import annotations

import math
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.draws.coarsen import inside
from narrowgauge.draws.layout import Layout, Request, StepAxis
from narrowgauge.draws.normals import exact_normals, normal_cdf
from narrowgauge.draws.quantiles import ADDITIVE, inverted
from narrowgauge.draws.streams import UniformStream

__all__ = ["ArmDraws", "Reader", "Tape", "TapeError"]

Doubles = npt.NDArray[np.float64]
Drawn = npt.NDArray[Any]

# A parameter such as rate * dt is taken for a multiple of the step where it is one to eight roundings on either side.
_SAME_PARAMETER = 16 * 2.0**-53
_INSIDE = (2.0**-53, 1.0 - 2.0**-53)
_ALWAYS = "accepted: as many draws of the same kinds whatever the state is, of which some may be left unused"


class TapeError(Exception):
    """A run asked for other random numbers than the run that it is compared with."""


class Reader(Protocol):
    """Gives a run its draws, request by request."""

    position: int

    def draw(self, request: Request, values: tuple[Any, ...]) -> Drawn:
        """Return the draws of the next request as new carriers or int64, of its size.

        `values` are all parameters, floats or float64 arrays. Raises TapeError where another request was due, and
        ValueError for parameters that the distribution does not have.
        """

    def finish(self) -> None:
        """Raise TapeError where requests are left over."""

    def ended(self, path: int, count: int) -> None:
        """Take note that one path has asked so often; TapeError where its draws are those of no other run."""

    def column(self, place: int, request: Request, values: tuple[Any, ...], path: int) -> Drawn:
        """Return one path's draws of a request that has been drawn, with parameters of its own.

        `request` is for all paths, which are its last axis; `values` are those of the path. Raises as `draw` does.
        """


class Tape:
    """The uniforms of a block by request; `steps` and `refinement` are those of the fine run.

    The first run to the end writes the requests, all others must repeat them. With `singly` each run asks path by path,
    and the last axis of every request is that of the paths. There a path may stop early, and another one go on, where
    requests belong to steps: each keeps to its own column. Where they do not, `steady` is false: a path that asks once
    more in one run than in another gets other draws ever after. A coarse run needs a layout.
    """

    def __init__(
        self,
        stream: UniformStream,
        *,
        paths: int,
        steps: int,
        refinement: int = 1,
        layout: Layout | None = None,
        singly: bool = False,
        steady: bool = True,
    ) -> None:
        self.paths, self.steps, self.refinement, self.layout = paths, steps, refinement, layout
        self.singly, self.steady = singly, steady
        self._counts: dict[int, int] = {}
        self.requests: list[Request] = []
        self.closed = False
        self._stream = stream
        self._uniforms: list[Doubles] = []
        self._normals: dict[int, Doubles] = {}

    def admit(self, place: int, request: Request) -> None:
        """Take a request down and draw its uniforms, or raise TapeError where it is not the one that was due."""
        if place == len(self.requests) and (self.singly or not self.closed):
            self.requests.append(request)
            self._uniforms.append(self._stream.take(request.size))
            return
        if place >= len(self.requests):
            raise TapeError(_beyond(len(self.requests), "the reference"))
        due = self.requests[place]
        if self.singly and (due.name, due.size) == (request.name, request.size):
            self.requests[place] = due.shared_with(request)  # each path has parameters of its own
        elif not due.agrees(request):
            raise TapeError(_other(place, request, due, "another path" if self.singly else "the reference"))

    def ended(self, path: int, count: int) -> None:
        """Note how often a path asked; TapeError where it was another number in the first run, and that matters."""
        before = self._counts.setdefault(path, count)
        if count != before and not self.steady:
            raise TapeError(
                f"path {path} asked {count} times for random numbers where the reference asked {before} times, which "
                f"shifts its draws; {_ALWAYS}"
            )

    def reach(self, count: int, period: int) -> None:
        """Take further requests down, like those a period earlier, which no path was long enough to make."""
        while len(self.requests) < count and 0 < period <= len(self.requests):
            self.admit(len(self.requests), self.requests[-period])

    def uniforms(self, place: int) -> Doubles:
        """Return the uniforms of a request, to be read only."""
        return self._uniforms[place]

    def normals(self, place: int) -> Doubles:
        """Return the normals behind a request, made once, to be read only."""
        if place not in self._normals:
            self._normals[place] = exact_normals(self._uniforms[place])
        return self._normals[place]


class ArmDraws:
    """A block's draws in one arithmetic: the fine run first, then the coarse one, which sums what the fine one got."""

    def __init__(self, tape: Tape, arithmetic: Arithmetic) -> None:
        self.tape, self.arithmetic = tape, arithmetic
        self._drawn: dict[int, Drawn] = {}

    def fine(self) -> Reader:
        """Return the reader of the fine run."""
        self._drawn.clear()
        return _Fine(self)

    def coarse(self) -> Reader:
        """Return the reader of the coarse run; TapeError where the fine one did not keep to the tape's layout."""
        layout = self.tape.layout
        assert layout is not None  # levels without a layout are not coupled
        expected = layout.requests(self.tape.steps)
        if self.tape.singly and not layout.after:
            self.tape.reach(expected, layout.period)
        if len(self.tape.requests) != expected:
            raise TapeError(
                f"the kernel asked {len(self.tape.requests)} times for random numbers where runs of other numbers of "
                f"steps let expect {expected}"
            )
        return _Coarse(self, layout)

    def make(self, place: int, values: tuple[Any, ...]) -> Drawn:
        """Return the draws of a request of the tape, which are kept if a coarse run can follow."""
        name = self.tape.requests[place].name
        if name == "normal":
            drawn: Drawn = self.arithmetic.cast(self.tape.normals(place))
        else:
            drawn = self.inverted(name, self.tape.uniforms(place), values)
        if self.tape.layout is None:
            return drawn
        self._drawn[place] = drawn
        return drawn.copy()  # the kernel may write into its own

    def drawn(self, place: int) -> Drawn:
        """Return the draws that the fine run got for a request, to be read only."""
        if place not in self._drawn:  # no path of this arm was long enough
            self.make(place, self.tape.requests[place].parameters)
        return self._drawn[place]

    def inverted(self, name: str, uniforms: Doubles, values: tuple[Any, ...]) -> Drawn:
        """Return the draws behind uniforms, rounded; whole numbers are exact."""
        if name == "uniform":
            return inside(self.arithmetic.cast(uniforms), self.arithmetic)
        drawn = inverted(name, uniforms, values)
        return drawn if drawn.dtype.kind == "i" else self.arithmetic.cast(drawn)


class _Fine:
    """Serves the fine run of an arm, and writes the tape if it is the first."""

    def __init__(self, arm: ArmDraws) -> None:
        self.position = 0
        self._arm = arm

    def draw(self, request: Request, values: tuple[Any, ...]) -> Drawn:
        """Return the draws of the next request."""
        self._arm.tape.admit(self.position, request)
        self.position += 1
        return self._arm.make(self.position - 1, values)

    def column(self, place: int, request: Request, values: tuple[Any, ...], path: int) -> Drawn:
        """Return one path's draws of a request that has been drawn, with parameters of its own."""
        self._arm.tape.admit(place, request)
        return self._arm.inverted(request.name, self._arm.tape.uniforms(place)[..., path], values)

    def ended(self, path: int, count: int) -> None:
        """Close the tape, and hold the path against the first run."""
        self._arm.tape.closed = True
        self._arm.tape.ended(path, count)

    def finish(self) -> None:
        """Close the tape, or raise TapeError where requests are left over."""
        self._arm.tape.closed = True
        _finished(self.position, len(self._arm.tape.requests), "the reference")


class _Coarse:
    """Serves the coarse run of an arm."""

    def __init__(self, arm: ArmDraws, layout: Layout) -> None:
        self.position = 0
        self._arm, self._layout = arm, layout
        self._steps = arm.tape.steps // arm.tape.refinement
        self._spread: dict[int, Doubles] = {}

    def draw(self, request: Request, values: tuple[Any, ...]) -> Drawn:
        """Return the draws of the next request, made from those of the fine run."""
        places, axis = self._behind(self.position, request)
        self.position += 1
        summed = self._summed(request, places, axis)
        if summed is not None:
            return summed
        return self._arm.inverted(request.name, self._uniforms(places, axis, request.size), values)

    def column(self, place: int, request: Request, values: tuple[Any, ...], path: int) -> Drawn:
        """Return one path's draws of a request that has been drawn, with parameters of its own."""
        places, axis = self._behind(place, request)
        if place not in self._spread:
            self._spread[place] = self._uniforms(places, axis, request.size)
        return self._arm.inverted(request.name, self._spread[place][..., path], values)

    def ended(self, path: int, count: int) -> None:
        """Leave it: with a layout the requests belong to steps."""

    def finish(self) -> None:
        """Raise TapeError where requests are left over."""
        _finished(self.position, self._layout.requests(self._steps), "its fine path")

    def _behind(self, position: int, request: Request) -> tuple[list[int], StepAxis | None]:
        """Return the fine run's requests behind one of the coarse run; TapeError where they do not fit it."""
        expected = self._layout.requests(self._steps)
        if position >= expected:
            raise TapeError(_beyond(expected, "its fine path"))
        tape = self._arm.tape
        places, axis = self._layout.sources(position, self._steps, tape.refinement)
        for one in (tape.requests[place] for place in places):
            if one.name != request.name or _coarsened(one.size, axis, tape.refinement) != request.size:
                raise TapeError(_other(position, request, one, "its fine path"))
        return places, axis

    def _summed(self, request: Request, places: list[int], axis: StepAxis | None) -> Drawn | None:
        """Return draws that are those of the fine run, or sums of them; None where uniforms are inverted."""
        arithmetic, m = self._arm.arithmetic, self._arm.tape.refinement
        normal = request.name == "normal"
        if len(places) == 1 and axis is None:  # not of a step: the same in both runs
            return self._arm.drawn(places[0]).copy() if normal else None
        if not normal and not self._adds_up(request, places, m if axis else 1):
            return None
        total = self._sum([self._arm.drawn(place) for place in places], axis, request.size)
        if not normal:
            return total
        return np.asarray(arithmetic.apply(np.multiply, (total, arithmetic.constant(1.0 / math.sqrt(m)))))

    def _uniforms(self, places: list[int], axis: StepAxis | None, size: tuple[int, ...]) -> Doubles:
        """Return the uniforms to be inverted for a request, of its size."""
        tape = self._arm.tape
        if len(places) == 1 and axis is None:
            return tape.uniforms(places[0])
        parts = [part for place in places for part in self._parts(tape.normals(place), axis)]
        normal = parts[0].copy()
        for part in parts[1:]:
            normal += part
        return np.clip(normal_cdf(normal / math.sqrt(tape.refinement)).reshape(size), *_INSIDE)

    def _adds_up(self, request: Request, places: list[int], each: int) -> bool:
        """Whether the fine draws add up to a draw with the coarse parameter: it is the sum of the fine ones."""
        if request.name not in ADDITIVE:
            return False
        fine = [self._arm.tape.requests[place].parameters[0] for place in places]
        coarse = request.parameters[0]
        if coarse is None or any(one is None for one in fine):
            return False  # from the state, or an array: not known to be in proportion
        total = math.fsum(one for one in fine if one is not None) * each
        return abs(total - coarse) <= _SAME_PARAMETER * abs(coarse)

    def _parts(self, values: Drawn, axis: StepAxis | None) -> list[Drawn]:
        """Return the draws of the M fine steps in a coarse one, in order of time."""
        if axis is None:
            return [values]
        m = self._arm.tape.refinement
        split = axis.split(values.shape, self._steps, m)
        assert split is not None  # the layout holds for this size
        shape, place = split
        spread = values.reshape(shape)
        return [spread.take(j, axis=place + 1) for j in range(m)]

    def _sum(self, drawn: list[Drawn], axis: StepAxis | None, size: tuple[int, ...]) -> Drawn:
        """Return the sum in the arm's arithmetic and in order of time; whole numbers are exact."""
        total, *rest = [part for values in drawn for part in self._parts(values, axis)]
        for part in rest:
            exact = total.dtype.kind == "i"
            total = total + part if exact else np.asarray(self._arm.arithmetic.apply(np.add, (total, part)))
        return np.array(total.reshape(size), order="C", copy=True)


def _coarsened(size: tuple[int, ...], axis: StepAxis | None, refinement: int) -> tuple[int, ...]:
    """Return the size that a coarse run has where the fine one has `size`."""
    if axis is None:
        return size
    long = size[axis.place]
    return (*size[: axis.place], long // refinement, *size[axis.place + 1 :])


def _beyond(count: int, owner: str) -> str:
    return f"the kernel asked for random numbers more often than {owner}, which asked {count} times"


def _other(place: int, request: Request, due: Request, owner: str) -> str:
    return f"request {place} for random numbers is {request} where {owner} has {due}; {_ALWAYS}"


def _finished(position: int, expected: int, owner: str) -> None:
    if position != expected:
        raise TapeError(f"the kernel asked {position} times for random numbers where {owner} asked {expected} times")
