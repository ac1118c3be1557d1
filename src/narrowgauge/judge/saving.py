"""What a choice of schemes saves: the total cost under a rival divided by that under the schemes, at equal variance."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from narrowgauge.judge.costbounds import CostBounds
from narrowgauge.judge.gain import LevelView, Scheme
from narrowgauge.judge.intervals import Interval, combined

__all__ = ["saving"]

_FURTHEST = 2.0**64  # a ratio of sums of S at which an upper bound is no bound any more
_HALVINGS = 60  # to the last bits of a float64

Doubles = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Sampled:
    """S of a level under the rival and under the plan: over all batches first, then without each one.

    `cautious` is S under the plan with four further corrections of the largest size seen.
    """

    rival: Doubles
    plan: Doubles
    cautious: Doubles


def saving(
    views: Mapping[int, LevelView], schemes: Mapping[int, Scheme], rival: Scheme, alpha: float
) -> Interval | None:
    """Return total cost with `rival` on every level divided by the plan's, at equal variance, with its interval.

    The set of schemes is held fixed. The lower bound always adds four further corrections of the largest size seen.
    None where nothing varies on any level, under the rival or under the plan.

    Where a counted series has too few events the bounds of that level's S take the place of its sample. With A and B
    the sums of S under rival and plan, A / B >= r is the same as A - r B >= 0, and that margin is a sum over the
    levels: its bound is the sum of the bounds of each such level, and of one by the jackknife for all others together,
    which share out alpha (Bonferroni). Solving for r as in "Some problems in interval estimation", J. R. Stat. Soc. B
    16(2), 1954, doi 10.1111/j.2517-6161.1954.tb00159.x (recalled from memory).
    """
    sampled = {level: _sampled(views[level], scheme, rival) for level, scheme in schemes.items()}
    theirs, ours = (
        sum(float(s[0]) for s in column)
        for column in ([one.rival for one in sampled.values()], [one.plan for one in sampled.values()])
    )
    if not theirs > 0 or not ours > 0:
        return None
    few = [level for level, scheme in schemes.items() if views[level].few(scheme) or views[level].few(rival)]
    point = _jackknife(sampled, alpha, cautious=False)
    if not few:
        low = min(point.low, _jackknife(sampled, alpha, cautious=True).low)
        return Interval(estimate=point.estimate, low=low, high=point.high, se=point.se).exponential()
    rest = {level: one for level, one in sampled.items() if level not in few}
    each = alpha / (len(few) + bool(rest))
    bounds = [views[level].bounds(schemes[level], rival, each) for level in few]
    low, high = _bounds(bounds, rest, theirs / ours, each)
    ratio = point.exponential()
    return Interval(
        estimate=ratio.estimate, low=min(low * low, ratio.estimate), high=max(high * high, ratio.estimate), se=point.se
    )


def _sampled(view: LevelView, scheme: Scheme, rival: Scheme) -> _Sampled:
    theirs = np.exp(view.logarithm(rival) / 2)
    if scheme == rival:  # what is not seen of one is not seen of the other
        return _Sampled(rival=theirs, plan=theirs, cautious=theirs)
    return _Sampled(
        rival=theirs,
        plan=np.exp(view.logarithm(scheme) / 2),
        cautious=np.exp(view.logarithm(scheme, cautious=True) / 2),
    )


def _jackknife(sampled: Mapping[int, _Sampled], alpha: float, *, cautious: bool) -> Interval:
    """Return the interval of log (A / B)^2: one batch of one level is left out at a time, the others stay whole."""
    rows = [(one.rival, one.cautious if cautious else one.plan) for one in sampled.values()]
    theirs, ours = sum(float(a[0]) for a, _ in rows), sum(float(b[0]) for _, b in rows)
    with np.errstate(divide="ignore", invalid="ignore"):
        replicates = [2 * np.log(theirs - a[0] + a) - 2 * np.log(ours - b[0] + b) for a, b in rows]
    return combined(replicates, 2 * math.log(theirs / ours), alpha)


def _bounds(
    bounds: list[CostBounds], rest: Mapping[int, _Sampled], estimate: float, alpha: float
) -> tuple[float, float]:
    """Return bounds of A / B: where the lower and the upper bound of A - r B are 0."""

    def low(times: float) -> float:
        margins = [one.margin(times)[0] for one in bounds]
        return sum(margins) + (min(_margin(rest, times, alpha, c).low for c in (False, True)) if rest else 0.0)

    def high(times: float) -> float:
        margins = [one.margin(times)[1] for one in bounds]
        return sum(margins) + (_margin(rest, times, alpha, False).high if rest else 0.0)

    # The lower bound of the margin is concave in r and the upper one convex: each has one root on its side.
    lower = 0.0 if not low(0.0) > 0 else estimate if low(estimate) > 0 else _root(low, 0.0, estimate)
    end = estimate
    while high(end) > 0 and end < _FURTHEST:
        end *= 2
    upper = math.inf if high(end) > 0 else estimate if end == estimate else _root(high, estimate, end)
    return lower, upper


def _margin(rest: Mapping[int, _Sampled], times: float, alpha: float, cautious: bool) -> Interval:
    """Return the jackknife interval of A - `times` B over the levels that are not counted."""
    margins = [one.rival - times * (one.cautious if cautious else one.plan) for one in rest.values()]
    total = sum(float(one[0]) for one in margins)
    return combined([total - one[0] + one for one in margins], total, alpha)


def _root(margin: Callable[[float], float], low: float, high: float) -> float:
    # Halving does not mind a bound that is infinite.
    for _ in range(_HALVINGS):
        middle = (low + high) / 2
        low, high = (middle, high) if margin(middle) > 0 else (low, middle)
    return (low + high) / 2
