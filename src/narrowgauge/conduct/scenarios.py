"""The scenarios of a box of parameters, and what trying them will take."""

from __future__ import annotations

import itertools
from collections.abc import Collection
from dataclasses import dataclass

import numpy as np
from scipy.stats import qmc

from narrowgauge.draws.streams import Purpose
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.domaintable import DomainTable
from narrowgauge.measure.arms import arms_of
from narrowgauge.measure.scenarios import Speed
from narrowgauge.measure.task import Key

__all__ = [
    "DomainPlan",
    "Scenario",
    "audited_point",
    "block_of",
    "corners_of",
    "domain_plan",
    "looks_of",
    "scenarios_of",
    "steps_of",
]

_MOST_CORNERS = 32


@dataclass(frozen=True, slots=True, kw_only=True)
class Scenario:
    """A point of the box: its number from 1 on, its parameters in the order of the sides, and whether it is drawn."""

    number: int
    values: tuple[float, ...]
    drawn: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class DomainPlan:
    """What trying the scenarios takes: `drawn` points and `corners`, paths of a level at the first look and at most.

    Path steps count fine and coarse steps of every arm; seconds are an estimate. Of so many looks, `kept` are there.
    """

    drawn: int
    corners: int
    paths: int
    most_paths: int
    path_steps: int
    most_path_steps: int
    seconds: float
    most_seconds: float
    kept: int


def scenarios_of(file: AuditFile) -> tuple[Scenario, ...]:
    """Return scrambled Sobol points of the box of [domain], then its corners; they follow from the audit file alone.

    The scrambling is keyed by the seed of the audit.
    """
    domain = _domain(file)
    axes = list(domain.parameters.values())
    key = np.random.SeedSequence(file.sampling.seed, spawn_key=(int(Purpose.SCENARIO),))
    source = np.random.Generator(np.random.PCG64DXSM(key))
    sobol = qmc.Sobol(len(axes), scramble=True, seed=source)
    places = sobol.random_base2(domain.scenarios.bit_length() - 1)
    drawn = [tuple(axis.value(float(place)) for axis, place in zip(axes, row, strict=True)) for row in places]
    return tuple(
        Scenario(number=number, values=values, drawn=number <= len(drawn))
        for number, values in enumerate([*drawn, *corners_of(file, _MOST_CORNERS)], start=1)
    )


def corners_of(file: AuditFile, most: int) -> list[tuple[float, ...]]:
    """Return the corners of the box of [domain], lower ends first, where there are at most so many.

    Else both ends of each side in turn, with the other parameters at the audited point.
    """
    ends = [(axis.low, axis.high) for axis in _domain(file).parameters.values()]
    if 2 ** len(ends) <= most:
        return list(itertools.product(*ends))
    point = audited_point(file)
    return [(*point[:side], end, *point[side + 1 :]) for side, both in enumerate(ends) for end in both]


def audited_point(file: AuditFile) -> tuple[float, ...]:
    """Return the audited parameters that are sides of the box, in the order of the sides."""
    found = [file.parameters[name] for name in _domain(file).parameters]
    return tuple(float(value) for value in found if isinstance(value, int | float))


def looks_of(domain: DomainTable) -> list[int]:
    """Return the paths of a level at which a scenario is judged: doubled within the budget."""
    looks = [domain.paths]
    while 2 * looks[-1] <= domain.most_paths:
        looks.append(2 * looks[-1])
    return looks


def block_of(file: AuditFile, looks: list[int], look: int) -> int:
    """Return the most paths of a block at a look: what it adds, in as few blocks as the audit's own are large."""
    added = looks[look] - (looks[look - 1] if look else 0)
    return min(file.sampling.block, added)


def steps_of(file: AuditFile, level: int) -> int:
    """Return the steps that one path takes on a level: fine and coarse, in every arm."""
    steps = file.ladder.steps(level) + (file.ladder.steps(level - 1) if file.coupled(level) else 0)
    return steps * len(arms_of(file.arms))


def domain_plan(file: AuditFile, speed: Speed | None, workers: int, kept: Collection[Key]) -> DomainPlan | None:
    """Return what the scenarios will take where `kept` looks of theirs are there; None without [domain]."""
    if file.domain is None or speed is None:
        return None
    scenarios, looks = scenarios_of(file), looks_of(file.domain)
    steps = sum(steps_of(file, level) for level in file.ladder.levels)
    step = speed.path / steps_of(file, speed.level)
    # Of a later look it is not known how many levels it has; that of a first one is a copy and all levels.
    first = sum((scenario.number, 0) not in kept for scenario in scenarios)
    one = speed.copies + step * steps * looks[0]
    most = (len(looks) - 1) * speed.copies + step * steps * (looks[-1] - looks[0])
    return DomainPlan(
        drawn=file.domain.scenarios,
        corners=len(scenarios) - file.domain.scenarios,
        paths=looks[0],
        most_paths=looks[-1],
        path_steps=len(scenarios) * looks[0] * steps,
        most_path_steps=len(scenarios) * looks[-1] * steps,
        seconds=first * one / workers,
        most_seconds=(first * one + len(scenarios) * most) / workers,
        kept=len(kept),
    )


def _domain(file: AuditFile) -> DomainTable:
    assert file.domain is not None  # or there are no scenarios
    return file.domain
