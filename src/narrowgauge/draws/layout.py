"""Which requests for random numbers belong to which time step, worked out from runs that differ in steps.

Two forms are known, and may be mixed: requests repeated at each step, and requests made once whose size has an axis of
the steps. Whichever requests are taken together, a sum of independent draws has the right distribution, so that means
stay right; but a layout that is wrong couples fine and coarse paths badly, which inflates the variance of their
difference and flatters narrow formats. So the candidates are tried, and the closest is taken, if it is close at all.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import islice, product

__all__ = ["Layout", "Request", "StepAxis", "draws_of", "layouts"]

_MOST_CANDIDATES = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class Request:
    """One call for random numbers: a row of QUANTILES, the size, and the parameters that are plain numbers.

    A parameter that comes from an array, or from the state, is None: it is no part of what runs must agree on.
    """

    name: str
    size: tuple[int, ...]
    parameters: tuple[float | None, ...] = ()

    def agrees(self, other: Request) -> bool:
        """Whether two requests of the same path, in two arithmetics, are for the same draws."""
        if (self.name, self.size, len(self.parameters)) != (other.name, other.size, len(other.parameters)):
            return False
        return all(a is None or b is None or a == b for a, b in zip(self.parameters, other.parameters, strict=True))

    def shared_with(self, other: Request) -> Request:
        """Return the request of two paths that differ in nothing but parameters: what differs is None."""
        pairs = zip(self.parameters, other.parameters, strict=True)
        return replace(self, parameters=tuple(a if a == b else None for a, b in pairs))

    def __str__(self) -> str:
        parameters = ", ".join("array" if p is None else f"{p!r}" for p in self.parameters)
        size = "one" if self.size == () else "size " + str(self.size)
        return f"{self.name}({parameters}), {size}"


@dataclass(frozen=True, slots=True, kw_only=True)
class StepAxis:
    """An axis of a size along which the steps run; where it is longer, `steps_first` says what runs faster."""

    place: int
    steps_first: bool = True

    def split(self, size: tuple[int, ...], groups: int, inside: int) -> tuple[tuple[int, ...], int] | None:
        """Return the shape that has axes (groups, inside) for the steps, and the place of `groups`; None if uneven."""
        each, left = divmod(size[self.place], groups * inside)
        if left:
            return None
        axes = (groups, inside, each) if self.steps_first else (each, groups, inside)
        before = size[: self.place]
        return (*before, *axes, *size[self.place + 1 :]), len(before) + (0 if self.steps_first else 1)


@dataclass(frozen=True, slots=True, kw_only=True)
class Layout:
    """The order of a run's requests: those before the time loop, `period` of them at each step, those after it.

    `axes` belongs to the requests outside the loop, in their order. The loop over the steps is gone through `runs`
    times, once for each share of the period: factor by factor, for instance.
    """

    before: int
    period: int
    after: int
    axes: tuple[StepAxis | None, ...]
    runs: int = 1

    def requests(self, steps: int) -> int:
        """Return how many requests a run of so many steps makes."""
        return self.before + self.period * steps + self.after

    def sources(self, place: int, steps: int, refinement: int) -> tuple[list[int], StepAxis | None]:
        """Return the fine run's requests behind one of the coarse run, which has `steps`, and their axis of steps.

        A single request without such an axis is the same in both runs.
        """
        if place < self.before:
            return [place], self.axes[place]
        each = self.period // self.runs
        run, inside = divmod(place - self.before, each * steps) if self.period else (self.runs, 0)
        if run < self.runs:
            step, one = divmod(inside, each)
            first = self.before + (run * steps + step) * refinement * each + one
            return [first + j * each for j in range(refinement)], None
        outside = place - self.period * steps
        return [outside + self.period * steps * refinement], self.axes[outside]


def draws_of(requests: Sequence[Request]) -> int:
    """Return how many random numbers the requests are for."""
    return sum(math.prod(request.size) for request in requests)


def layouts(runs: Mapping[int, Sequence[Request]]) -> list[Layout] | str:
    """Return every layout that fits runs of three or more numbers of steps, likeliest first; or why there is none.

    `runs` holds the requests by steps. More than one layout fits where draws of one kind and size are made both inside
    and outside the time loop, or where an axis is a multiple of the steps.
    """
    counts = sorted(runs)
    first, second = counts[0], counts[1]
    period, uneven = divmod(len(runs[second]) - len(runs[first]), second - first)
    rest = len(runs[first]) - period * first
    if uneven or period < 0 or rest < 0 or any(len(runs[n]) != rest + period * n for n in counts):
        numbers = ", ".join(f"{len(runs[n])} with {n}" for n in counts)
        return f"the number of requests does not grow evenly with the steps ({numbers})"
    found: list[Layout] = []
    reasons: list[str] = []
    for after in range(rest + 1) if period else (0,):
        fits = _fitting(runs, rest - after, period, after)
        if isinstance(fits, str):
            reasons.append(fits)
        else:
            found += fits
    # Several passes over the steps ask as often as one that asks several times at each step.
    found = found[:_MOST_CANDIDATES]
    again = [replace(one, runs=count) for one in found for count in range(2, period + 1) if period % count == 0]
    found += [one for one in again[:_MOST_CANDIDATES] if _repeats(runs, one)]
    return found or reasons[0]


def _repeats(runs: Mapping[int, Sequence[Request]], layout: Layout) -> bool:
    """Whether each pass over the steps makes the same requests at every step of it."""
    each = layout.period // layout.runs
    for n, requests in runs.items():
        for run in range(layout.runs):
            start = layout.before + run * each * n
            asked = [(request.name, request.size) for request in requests[start : start + each * n]]
            if asked != asked[:each] * n:
                return False
    return True


def _fitting(runs: Mapping[int, Sequence[Request]], before: int, period: int, after: int) -> list[Layout] | str:
    """Return the layouts with one split into before, inside and after the time loop, or why there is none."""
    model = runs[min(runs)][before : before + period]
    for n, requests in runs.items():
        for place, request in enumerate(requests[before : before + period * n]):
            same = model[place % period]
            if (request.name, request.size) != (same.name, same.size):
                return f"with {n} steps the requests of step {place // period} are not those of step 0"
    choices: list[list[StepAxis | None]] = []
    for place in range(before + after):
        single = {n: requests[place if place < before else place + period * n] for n, requests in runs.items()}
        axes = _axes(single)
        if isinstance(axes, str):
            return axes
        choices.append(axes)
    if not period and all(axes == [None] for axes in choices):
        return "no request and no size grows with the steps"
    # One kernel, one habit: all requests ahead the same way round come first, then every mixture.
    ways = max((len(axes) for axes in choices), default=1)
    alike = [tuple(axes[min(way, len(axes) - 1)] for axes in choices) for way in range(ways)]
    mixed = islice(product(*choices), _MOST_CANDIDATES)
    return [Layout(before=before, period=period, after=after, axes=axes) for axes in dict.fromkeys([*alike, *mixed])]


def _axes(single: Mapping[int, Request]) -> list[StepAxis | None] | str:
    """Return where the steps can run in a request that each run makes once, or what stands against it."""
    counts = sorted(single)
    model = single[counts[0]]
    for n in counts:
        if single[n].name != model.name or len(single[n].size) != len(model.size):
            return f"a request outside the time loop is {single[n]} with {n} steps, {model} with {counts[0]}"
    moving = [a for a in range(len(model.size)) if len({single[n].size[a] for n in counts}) > 1]
    if not moving:
        return [None]
    if len(moving) > 1:
        return f"more than one axis of {model} grows with the steps"
    (place,) = moving
    if any(single[n].size[place] * counts[0] != model.size[place] * n for n in counts) or model.size[place] % counts[0]:
        sizes = ", ".join(f"{single[n].size[place]} with {n}" for n in counts)
        return f"axis {place} of a size is no multiple of the steps ({sizes})"
    if model.size[place] == counts[0]:
        return [StepAxis(place=place)]
    return [StepAxis(place=place), StepAxis(place=place, steps_first=False)]
