"""How many paths each branch needs for the target, what that costs, and what it saves.

Allocation as in "Multilevel Monte Carlo methods", Acta Numerica 24, 2015, doi 10.1017/S096249291500001X, with the
sampling variance set to what the bias budget leaves: (1 - bias_share^2) rmse^2.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from narrowgauge.judge.gain import LevelView, Scheme
from narrowgauge.judge.intervals import Interval, combined

__all__ = ["Allocation", "LevelPlan", "allocate", "saving"]

_LEAST_PATHS = 32
_PATHS_PER_KURTOSIS = 10

Doubles = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelPlan:
    """Paths of a level's low branch (or of its only one) and of its correction branch, and their cost together."""

    level: int
    scheme: Scheme
    paths: int
    correction_paths: int | None
    cost: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Allocation:
    """A plan for one quantity; costs are in the unit of the cost table."""

    rmse: float
    levels: tuple[LevelPlan, ...]
    cost: float


def allocate(
    views: Mapping[int, LevelView], schemes: Mapping[int, Scheme], rmse: float, bias_share: float
) -> Allocation:
    """Return the paths per branch that reach `rmse` (in the quantity's unit) at the smallest cost.

    N = max(32, 10 x kurtosis of R for a correction branch, ceil(S_total sqrt(V / C) / budget)); branches are
    independent.
    """
    budget = (1.0 - bias_share**2) * rmse**2
    parts = {level: _parts(views[level], schemes[level]) for level in schemes}
    total = sum(math.sqrt(v * c) for branches in parts.values() for v, c, _ in branches)
    plans = []
    for level, branches in parts.items():
        paths = [max(floor, math.ceil(total * math.sqrt(v / c) / budget)) for v, c, floor in branches]
        cost = sum(n * c for n, (_, c, _) in zip(paths, branches, strict=True))
        plans.append(
            LevelPlan(
                level=level,
                scheme=schemes[level],
                paths=paths[0],
                correction_paths=paths[1] if len(paths) > 1 else None,
                cost=cost,
            )
        )
    return Allocation(rmse=rmse, levels=tuple(plans), cost=sum(plan.cost for plan in plans))


def saving(
    views: Mapping[int, LevelView], schemes: Mapping[int, Scheme], rival: Scheme, alpha: float
) -> Interval | None:
    """Return total cost with `rival` on every level divided by the plan's, at equal variance, with its interval.

    The set of schemes is held fixed. None where nothing varies on any level, under the rival or under the plan.
    """
    theirs = {level: np.exp(views[level].logarithm(rival) / 2) for level in schemes}
    ours = {level: np.exp(views[level].logarithm(scheme) / 2) for level, scheme in schemes.items()}
    their_total = sum(float(s[0]) for s in theirs.values())
    our_total = sum(float(s[0]) for s in ours.values())
    if not their_total > 0 or not our_total > 0:
        return None
    # One batch of one level is left out at a time; the other levels stay whole.
    replicates: Sequence[Doubles] = [
        2 * np.log(their_total - theirs[level][0] + theirs[level])
        - 2 * np.log(our_total - ours[level][0] + ours[level])
        for level in schemes
    ]
    return combined(replicates, 2 * math.log(their_total / our_total), alpha).exponential()


def _parts(view: LevelView, scheme: Scheme) -> list[tuple[float, float, int]]:
    """Return variance, cost and least number of paths of each branch."""
    low = view.tally.differences[scheme.narrow].moments.variance
    found = [(low, view.costs.path(scheme.narrow), _LEAST_PATHS)]
    if scheme.wide is not None:
        moments = view.tally.corrections[scheme.narrow, scheme.wide].moments
        least = max(_LEAST_PATHS, math.ceil(_PATHS_PER_KURTOSIS * (moments.kurtosis or 0.0)))
        found.append((moments.variance, view.costs.correction(scheme.narrow, scheme.wide), least))
    return found
