"""The paths of each branch under the schemes of a policy: the audit's own plan, or one worked out anew for others."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from narrowgauge.judge.allocation import CommonPlan, Part, common_plan, least_paths, planned
from narrowgauge.judge.gain import LevelCosts, Scheme
from narrowgauge.policy.choice import scheme_of, spread
from narrowgauge.record.audit import AuditRecord, LevelEntry, QuantityEntry

__all__ = ["replanned"]


def replanned(
    record: AuditRecord, schemes: Mapping[int, Scheme], costs: Mapping[int, LevelCosts], bias_share: float
) -> CommonPlan:
    """Return the plan for all quantities with the scheme of each level; raises KeyError where a figure is missing.

    Variances are those of the record. One that the audit planned from an upper bound, which the record does not hold,
    is read from the paths of that plan.
    """
    plans = {}
    for name, quantity in record.quantities.items():
        rmse = quantity.allocation.rmse
        if rmse is None:
            raise KeyError(f"a target for {name}")
        budget = (1.0 - bias_share**2) * rmse**2
        known = _audited(quantity, costs, budget)
        parts = {
            level: known[level]
            if scheme == scheme_of(quantity.allocation.levels[level].scheme)
            else _parts(quantity.levels[level], scheme, costs[level])
            for level, scheme in schemes.items()
        }
        plans[name] = planned(parts, schemes, rmse, bias_share)
    return common_plan(plans)


def _audited(quantity: QuantityEntry, costs: Mapping[int, LevelCosts], budget: float) -> dict[int, Sequence[Part]]:
    """Return the branches of the audit's plan of one quantity.

    With T = sum of sqrt(V C), a branch has at least N = T sqrt(V / C) / budget paths. Of the branches planned from a
    bound N and C are known, so that T <= K + budget B / T, K the sum over the others and B that of their N C: hence
    T is at most the root of that, and V at most (N budget / T)^2 C.
    """
    found: dict[int, Sequence[Part]] = {}
    others, bound = 0.0, 0.0
    for plan in quantity.allocation.levels:
        scheme = scheme_of(plan.scheme)
        parts = _parts(quantity.levels[plan.level], scheme, costs[plan.level], counted=plan.bounded)
        found[plan.level] = parts
        for part in parts:
            others += 0.0 if part.bounded else math.sqrt(part.variance * part.cost)
            bound += (plan.correction_paths or 0) * part.cost if part.bounded else 0.0
    total = (others + math.sqrt(others**2 + 4 * budget * bound)) / 2
    for plan in quantity.allocation.levels:
        if plan.bounded and total > 0:
            low, correction = found[plan.level]
            root = (plan.correction_paths or 0) * budget / total
            found[plan.level] = [
                low,
                Part(variance=root**2 * correction.cost, cost=correction.cost, least=correction.least, bounded=True),
            ]
    return found


def _parts(level: LevelEntry, scheme: Scheme, costs: LevelCosts, *, counted: bool = False) -> Sequence[Part]:
    """Return the branches of a scheme on one level; `counted`: the variance of its correction is not the record's."""
    alone = Scheme(kind="alone", narrow=scheme.narrow)
    variances = spread(level, alone if counted else scheme)
    if variances is None:
        raise KeyError(f"the variances of {scheme} on level {level.level}")
    found = [Part(variance=variances[0], cost=costs.path(scheme.narrow), least=least_paths(None))]
    if scheme.wide is not None:
        correction = level.corrections[f"{scheme.narrow}:{scheme.wide}"]
        found.append(
            Part(
                variance=0.0 if counted else variances[1],
                cost=costs.correction(scheme.narrow, scheme.wide),
                least=least_paths(correction.kurtosis),
                bounded=counted,
            )
        )
    return found
