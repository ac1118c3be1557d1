"""How many paths each branch needs for the target, and what that costs: for one quantity, and for all together.

Allocation as in "Multilevel Monte Carlo methods", Acta Numerica 24, 2015, doi 10.1017/S096249291500001X, with the
sampling variance set to what the bias budget leaves: (1 - bias_share^2) rmse^2.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from narrowgauge.judge.gain import LevelView, Scheme

__all__ = [
    "Allocation",
    "Branch",
    "CommonLevel",
    "CommonPlan",
    "LevelPlan",
    "Part",
    "allocate",
    "common_plan",
    "least_paths",
    "planned",
]

_LEAST_PATHS = 32
_PATHS_PER_KURTOSIS = 10


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelPlan:
    """Paths of a level's low branch (or of its only one) and of its correction branch, and their cost together.

    `bounded` is whether the correction has too few events for a sample variance, so that the upper bound of its
    variance was taken. `path_costs` are the costs of one path of each branch.
    """

    level: int
    scheme: Scheme
    paths: int
    correction_paths: int | None
    cost: float
    bounded: bool
    path_costs: tuple[float, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Allocation:
    """A plan for one quantity; costs are in the unit of the cost table."""

    rmse: float
    levels: tuple[LevelPlan, ...]
    cost: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Branch:
    """Paths of one branch of a level, and the quantity that needs so many."""

    paths: int
    decided_by: str


@dataclass(frozen=True, slots=True, kw_only=True)
class CommonLevel:
    """One level of a plan that serves all quantities; `bounded` as in the plan of the one that decides."""

    level: int
    scheme: Scheme
    low: Branch
    correction: Branch | None
    bounded: bool
    cost: float


@dataclass(frozen=True, slots=True, kw_only=True)
class CommonPlan:
    """A plan that serves all quantities, and its cost in the unit of the cost table."""

    levels: tuple[CommonLevel, ...]
    cost: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """One branch: its variance, the cost of a path, the least number of paths, whether the variance is a bound."""

    variance: float
    cost: float
    least: int
    bounded: bool = False


def allocate(
    views: Mapping[int, LevelView], schemes: Mapping[int, Scheme], rmse: float, bias_share: float, alpha: float
) -> Allocation:
    """Return the paths per branch that reach `rmse` (in the quantity's unit) at the smallest cost.

    N = max(32, 10 x kurtosis of R for a correction branch, ceil(S_total sqrt(V / C) / budget)); branches are
    independent. A correction with too few events is planned from upper bounds of its variance that hold on all levels
    together with probability 1 - alpha.
    """
    parts = {level: _parts(views[level], schemes[level], alpha / len(schemes)) for level in schemes}
    return planned(parts, schemes, rmse, bias_share)


def least_paths(kurtosis: float | None) -> int:
    """Return the fewest paths of a branch: of a correction branch by the kurtosis of its correction."""
    return max(_LEAST_PATHS, math.ceil(_PATHS_PER_KURTOSIS * (kurtosis or 0.0)))


def planned(
    parts: Mapping[int, Sequence[Part]], schemes: Mapping[int, Scheme], rmse: float, bias_share: float
) -> Allocation:
    """Return the paths of branches whose variances and costs are known; one or two of them a level."""
    budget = (1.0 - bias_share**2) * rmse**2
    total = sum(math.sqrt(part.variance * part.cost) for branches in parts.values() for part in branches)
    plans = []
    for level, branches in parts.items():
        paths = [max(part.least, math.ceil(total * math.sqrt(part.variance / part.cost) / budget)) for part in branches]
        plans.append(
            LevelPlan(
                level=level,
                scheme=schemes[level],
                paths=paths[0],
                correction_paths=paths[1] if len(paths) > 1 else None,
                cost=sum(n * part.cost for n, part in zip(paths, branches, strict=True)),
                bounded=any(part.bounded for part in branches),
                path_costs=tuple(part.cost for part in branches),
            )
        )
    return Allocation(rmse=rmse, levels=tuple(plans), cost=sum(plan.cost for plan in plans))


def common_plan(allocations: Mapping[str, Allocation]) -> CommonPlan:
    """Return the plan that takes, per branch, the most paths that any quantity needs.

    The allocations are those of the quantities, by name, all with the same scheme on each level. Of quantities that
    need the same number the first is named.
    """
    levels = []
    for plans in zip(*(one.levels for one in allocations.values()), strict=True):
        by_name = dict(zip(allocations, plans, strict=True))
        first = plans[0]
        low = _most({name: plan.paths for name, plan in by_name.items()})
        correction, bounded = None, False
        if first.correction_paths is not None:
            correction = _most({name: plan.correction_paths or 0 for name, plan in by_name.items()})
            bounded = by_name[correction.decided_by].bounded
        branches = [low] if correction is None else [low, correction]
        levels.append(
            CommonLevel(
                level=first.level,
                scheme=first.scheme,
                low=low,
                correction=correction,
                bounded=bounded,
                cost=sum(one.paths * cost for one, cost in zip(branches, first.path_costs, strict=True)),
            )
        )
    return CommonPlan(levels=tuple(levels), cost=sum(one.cost for one in levels))


def _most(paths: Mapping[str, int]) -> Branch:
    decider = max(paths, key=paths.__getitem__)
    return Branch(paths=paths[decider], decided_by=decider)


def _parts(view: LevelView, scheme: Scheme, alpha: float) -> Sequence[Part]:
    """Return the branches of a scheme."""
    low = view.tally.differences[scheme.narrow].moments.variance
    found = [Part(variance=low, cost=view.costs.path(scheme.narrow), least=least_paths(None))]
    if scheme.wide is not None:
        moments = view.tally.corrections[scheme.narrow, scheme.wide].moments
        bound = view.correction_high(scheme, alpha)
        found.append(
            Part(
                variance=moments.variance if bound is None else max(bound, moments.variance),
                cost=view.costs.correction(scheme.narrow, scheme.wide),
                least=least_paths(moments.kurtosis),
                bounded=bound is not None,
            )
        )
    return found
