"""Whether the verdict of the audited point holds elsewhere: the same schemes, judged at other parameters.

A scheme on a level, with `edge` that of its narrow format for the quantity for which it is smallest:

| admissible | its format pays for every quantity | upper bound of the edge below 1 | outcome   |
|------------|------------------------------------|---------------------------------|-----------|
| no         |                                    |                                 | refused   |
|            |                                    | yes                             | refused   |
| yes        | yes                                |                                 | passes    |
| else       |                                    |                                 | undecided |

Formats that are not judged, the reference's and today's, pass where they are finite.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

from narrowgauge.judge.asked import budget_levels, rmse_of
from narrowgauge.judge.gain import Scheme
from narrowgauge.judge.intervals import Interval
from narrowgauge.judge.schemes import ArmJudgement, LevelJudgement, admission
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.tally import LevelTally
from narrowgauge.record.domain import edge_alone

__all__ = ["ArmFigures", "Outcome", "SchemeFigures", "arm_figures", "judge_scheme", "tried_scheme", "worse"]

Outcome = Literal["passes", "undecided", "refused"]
_ORDER: tuple[Outcome, ...] = ("passes", "undecided", "refused")


@dataclass(frozen=True, slots=True, kw_only=True)
class SchemeFigures:
    """How a scheme does on one level of a scenario; `reason` is None where it passes.

    `edge` and `bias` are those of the quantity that is worst off, None where there are none. With several quantities an
    undecided scheme has the reason of one of which more than the edge is open, and no edge where an open one has none.
    """

    outcome: Outcome
    reason: str | None
    edge: Interval | None
    bias: Interval | None
    paths_needed: int | None


@dataclass(frozen=True, slots=True, kw_only=True)
class ArmFigures:
    """How a format does on one level of a scenario, by the quantity that is worst off.

    `spent` is the bound of the bias, away from 0, over the level's share of the target; without a target over the
    standard deviation of the level. `nonfinite` is the number of paths.
    """

    edge: Interval | None
    bias: Interval | None
    spent: float
    nonfinite: int
    raised: bool


def worse(one: Outcome, other: Outcome) -> Outcome:
    """Return the worse of two outcomes."""
    return max(one, other, key=_ORDER.index)


def tried_scheme(tally: LevelTally, judged: LevelJudgement, file: AuditFile, alpha: float) -> Scheme:
    """Return the scheme of a level that is tried elsewhere: the one of the verdict if it is known to pay there.

    Where that is open the reference alone takes its place, as it does in a policy.
    """
    known = judged.joint is not None and judge_scheme(tally, judged, file, alpha, judged.joint).outcome == "passes"
    return judged.joint if known and judged.joint is not None else Scheme(kind="alone", narrow=REFERENCE)


def judge_scheme(
    tally: LevelTally, judged: LevelJudgement, file: AuditFile, alpha: float, scheme: Scheme
) -> SchemeFigures:
    """Return how a scheme does on a level by the table above; `judged` is the judgement of the same tally."""
    found = admission(tally, judged.views, file, alpha, scheme)
    arms = [arms[scheme.narrow] for arms in judged.arms.values() if scheme.narrow in arms]
    edges = [arm.edge for arm in arms if arm.edge is not None]
    edge = min(edges, key=lambda one: one.low, default=None)
    bias = _worst_bias(judged, file, alpha, scheme) if found.reason not in ("raised", "nonfinite") else None
    outcome: Outcome = "undecided"
    reason: str | None = "budget"
    needed = max((arm.paths_needed for arm in arms if arm.paths_needed is not None), default=None)
    refuted = next((arm for arm in arms if _refuted(arm)), None)
    if found.standing == "no":
        outcome, reason, needed = "refused", found.reason, None
    elif refuted is not None:
        outcome, reason, edge, needed = "refused", "edge", refuted.edge, None
    elif found.standing == "unknown":
        reason, needed = found.reason, found.paths_needed
    elif all(arm.verdict == "pays" for arm in arms):
        outcome, reason, needed = "passes", None, None
    else:
        waiting = [arm for arm in arms if arm.verdict != "pays"]
        reason = next((arm.reason for arm in waiting if not edge_alone(arm.reason)), waiting[0].reason)
        edge = None if any(arm.edge is None for arm in waiting) else edge
    return SchemeFigures(outcome=outcome, reason=reason, edge=edge, bias=bias, paths_needed=needed)


def arm_figures(tally: LevelTally, judged: LevelJudgement, file: AuditFile, arm: str) -> ArmFigures:
    """Return how a format that is judged does on a level."""
    found = [arms[arm] for arms in judged.arms.values()]
    edges = [one.edge for one in found if one.edge is not None]
    series = [
        one
        for quantity in tally.quantities.values()
        for one in (quantity.values.get(arm), quantity.differences.get(arm))
        if one is not None
    ]
    spent = [
        (_spent(judged, file, quantity, one.bias), one.bias)
        for quantity, one in zip(judged.arms, found, strict=True)
        if one.bias is not None
    ]
    most = max(spent, key=lambda pair: pair[0], default=(0.0, None))
    return ArmFigures(
        edge=min(edges, key=lambda one: one.low, default=None),
        bias=most[1],
        spent=most[0],
        nonfinite=max((one.nonfinite for one in series), default=0),
        raised=arm in tally.raised,
    )


def _refuted(arm: ArmJudgement) -> bool:
    return (arm.verdict, arm.reason) == ("does not pay", "edge") and arm.edge is not None and arm.edge.high < 1


def _worst_bias(judged: LevelJudgement, file: AuditFile, alpha: float, scheme: Scheme) -> Interval | None:
    found = [(quantity, view.bias(scheme.top, alpha)) for quantity, view in judged.views.items()]
    return max(found, key=lambda pair: _spent(judged, file, *pair), default=("", None))[1]


def _spent(judged: LevelJudgement, file: AuditFile, quantity: str, bias: Interval) -> float:
    """Return the bound of a bias over what it may be, or without a target over the level's standard deviation."""
    size, rmse = max(abs(bias.low), abs(bias.high)), rmse_of(file, quantity)
    if size == 0.0:
        return 0.0
    if rmse is not None and file.target is not None:
        return size * budget_levels(file) / (file.target.bias_share * rmse)
    variance = judged.views[quantity].tally.differences[REFERENCE].moments.variance
    return size / math.sqrt(variance) if variance > 0 else math.inf
