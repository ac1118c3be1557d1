"""Bounds of S = sum of sqrt(V C) of two schemes on one level, from bounds of every variance in them.

What the two schemes share is V, the variance of the reference's level difference: every other variance is bounded as a
linear function of it, on the side that counts, so that V itself, which may be known least of all, does not count twice.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

__all__ = ["CostBounds", "Side"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Side:
    """One bound of S of a scheme where the reference's variance is v: sqrt(cost max(slope v + offset, 0)) + rest."""

    slope: float
    offset: float
    cost: float
    rest: float

    def at(self, v: float) -> float:
        """Return the bound of S at v."""
        return math.sqrt(self.cost * max(self.slope * v + self.offset, 0.0)) + self.rest


@dataclass(frozen=True, slots=True, kw_only=True)
class CostBounds:
    """Lower and upper bound of S of the own scheme and of a rival, and those of V, on one level.

    The lower bounds hold together with a stated probability, and so do the upper ones. `same` is whether own scheme
    and rival are one.
    """

    v: tuple[float, float]
    own: tuple[Side, Side]
    rival: tuple[Side, Side]
    same: bool

    def ratio(self) -> tuple[float, float]:
        """Return bounds of the cost ratio, (S of the rival / S of the own scheme)^2.

        With V - s under the rival's root and V + s' under the own one, the ratio falls up to V = s, where the rival's
        root is cut at 0; then the sign of its slope, that of s + s' + b' sqrt(V + s') - b sqrt(V - s), changes at most
        once, from rising to falling. So the worst V is an end of its interval, or such a cut.
        """
        worst = self._within(_cuts(self.rival[0], self.own[0]))
        low = min(_square_ratio(self.rival[0].at(v), self.own[1].at(v)) for v in worst)
        high = max(_square_ratio(self.rival[1].at(v), self.own[0].at(v)) for v in worst)
        return low, high

    def margin(self, times: float) -> tuple[float, float]:
        """Return bounds of S of the rival less `times` S of the own scheme.

        Between the cuts of the two roots their difference has at most one stationary V, which a linear equation gives.
        """
        if self.same:
            found = [(1.0 - times) * side.at(v) for side, v in zip(self.own, self.v, strict=True)]
            return _least(found), -_least(-one for one in found)
        low = self._differences(self.rival[0], self.own[1], times)
        high = self._differences(self.rival[1], self.own[0], times)
        return _least(low), -_least(-one for one in high)

    def _differences(self, rival: Side, own: Side, times: float) -> list[float]:
        places = self._within([*_cuts(rival, own), *_stationary(rival, own, times)])
        return [rival.at(v) - times * own.at(v) for v in places]

    def _within(self, places: Iterable[float]) -> list[float]:
        low, high = self.v
        return [low, high, *(min(max(place, low), high) for place in places)]


def _cuts(*sides: Side) -> list[float]:
    """Return where the roots of these bounds are cut at 0."""
    return [-side.offset / side.slope for side in sides if side.slope > 0]


def _stationary(rival: Side, own: Side, times: float) -> list[float]:
    """Return the v at which sqrt(c (s v + o)) less `times` sqrt(c' (s' v + o')) has no slope, if there is one."""
    a, b = rival.cost * rival.slope**2, times**2 * own.cost * own.slope**2
    slope = a * own.slope - b * rival.slope
    return [] if slope == 0 else [(b * rival.offset - a * own.offset) / slope]


def _least(values: Iterable[float]) -> float:
    """Return the smallest; minus infinity where one is not known, as of two infinite bounds."""
    return min(-math.inf if math.isnan(value) else value for value in values)


def _square_ratio(above: float, below: float) -> float:
    return (above / below) * (above / below) if below > 0 else math.inf
