"""What a scheme costs on one level, and how many times more a rival costs at equal variance.

With S = sum of sqrt(V C) over the parts of a scheme, the total cost for a given variance is proportional to the square
of the sum of S over the levels ("Multilevel Monte Carlo methods", Acta Numerica 24, 2015,
doi 10.1017/S096249291500001X), so that the scheme with the smallest S on each level is the best whole.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import optimize

from narrowgauge.judge.intervals import Interval, binomial_lower, binomial_upper, jackknife, means, variances
from narrowgauge.kernel.audittables import CostTable
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.block import QuantityTally
from narrowgauge.measure.moments import Series

__all__ = ["FEW_EVENTS", "LevelCosts", "LevelView", "Scheme", "breakeven"]

FEW_EVENTS = 20  # fewer paths with a nonzero correction: bounds of a probability instead of a sample variance
_UNSEEN = 4  # further corrections of the largest size seen that the lower bound of an edge always adds

Doubles = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Scheme:
    """How a level is estimated: `alone` in one arm (`wide` is None), or `split` into two branches."""

    kind: Literal["alone", "split"]
    narrow: str
    wide: str | None = None

    @property
    def top(self) -> str:
        """The widest arm of the scheme: what its expectation is that of."""
        return self.narrow if self.wide is None else self.wide

    @property
    def arms(self) -> tuple[str, ...]:
        """The arms that the scheme runs."""
        return (self.narrow,) if self.wide is None else (self.narrow, self.wide)

    def __str__(self) -> str:
        return f"{self.narrow} alone" if self.wide is None else f"{self.narrow} + correction to {self.wide}"


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelCosts:
    """Costs on one level: `steps` of fine and coarse path together, `draws` of one path, and the cost table."""

    steps: int
    draws: int
    table: CostTable

    def path(self, arm: str) -> float:
        """Return the cost of one path in one arm."""
        return self.steps * self.table.step(arm) + self._fixed

    def correction(self, narrow: str, wide: str) -> float:
        """Return the cost of one path of a correction branch: both arms' steps, draws and fixed part once."""
        return self.steps * (self.table.step(narrow) + self.table.step(wide)) + self._fixed

    @property
    def _fixed(self) -> float:
        return self.draws * self.table.draws + self.table.path


class LevelView:
    """One quantity on one level: the variances of every arm and pair, with and without each batch.

    `largest_correction` is a declared bound on |R|, or None; then it is taken as twice the largest |P| seen.
    """

    def __init__(self, tally: QuantityTally, costs: LevelCosts, largest_correction: float | None) -> None:
        self.tally = tally
        self.costs = costs
        seen = max((series.largest for series in tally.values.values()), default=0.0)
        self._r_max = largest_correction if largest_correction is not None else 2.0 * seen

    def correction(self, scheme: Scheme) -> Series | None:
        """Return the series that a scheme's risk rests on: its correction, or the arm's against the reference."""
        narrow = scheme.narrow
        wide = REFERENCE if scheme.wide is None else scheme.wide
        return None if narrow == REFERENCE else self.tally.corrections[narrow, wide]

    def logarithm(self, scheme: Scheme, cautious: bool = False) -> Doubles:
        """Return log S^2, the cost at unit variance, over all batches first and then without each batch.

        `cautious` adds four corrections of the largest size seen to the sum of squares.
        """
        risk = self.correction(scheme)
        extra = _UNSEEN * risk.largest**2 if cautious and risk is not None else 0.0
        difference = self.tally.differences[scheme.narrow]
        if scheme.wide is None:
            s = np.sqrt(variances(difference, extra) * self.costs.path(scheme.narrow))
        else:
            s = np.sqrt(variances(difference) * self.costs.path(scheme.narrow))
            r = variances(self.tally.corrections[scheme.narrow, scheme.wide], extra)
            s = s + np.sqrt(r * self.costs.correction(scheme.narrow, scheme.wide))
        with np.errstate(divide="ignore"):
            return np.asarray(2.0 * np.log(s))

    def ratio(self, own: Scheme, rival: Scheme, alpha: float) -> Interval:
        """Return the rival's cost divided by the own scheme's at equal variance, with its interval at 1 - alpha."""
        with np.errstate(invalid="ignore"):
            point = jackknife(self.logarithm(rival) - self.logarithm(own), alpha)
            if self._few(own) or self._few(rival):
                low, high = self._counted_bounds(own, rival, alpha)
                return Interval(
                    estimate=point.exponential().estimate,
                    low=min(low, point.exponential().estimate),
                    high=max(high, point.exponential().estimate),
                    se=point.se,
                )
            cautious = jackknife(self.logarithm(rival) - self.logarithm(own, cautious=True), alpha)
        low = min(cautious.low, point.low)
        return Interval(estimate=point.estimate, low=low, high=point.high, se=point.se).exponential()

    def bias(self, top: str, alpha: float) -> Interval:
        """Return the mean of D^top - D^ref with its interval at 1 - alpha; exactly 0 for the reference."""
        if top == REFERENCE:
            return Interval(estimate=0.0, low=0.0, high=0.0, se=0.0)
        series = self.tally.corrections[top, REFERENCE]
        interval = jackknife(-means(series), alpha)
        if not (series.counted and series.events < FEW_EVENTS):
            return interval
        bound = self._r_max * binomial_upper(series.events, series.moments.total, alpha)
        return Interval(estimate=interval.estimate, low=-bound, high=bound, se=interval.se)

    def _few(self, scheme: Scheme) -> bool:
        """Whether a scheme's correction, or the level difference itself, is counted and has too few events."""
        found = [self.tally.differences[REFERENCE], self.correction(scheme)]
        return any(s is not None and s.counted and s.events < FEW_EVENTS for s in found)

    def _counted_bounds(self, own: Scheme, rival: Scheme, alpha: float) -> tuple[float, float]:
        """Return bounds of the cost ratio from bounds of every variance in it.

        The reference's V is bounded once; a narrow arm's variance differs from it by at most the mean squared plus
        d_max^2 times the probability that the correction is not zero, d_max being half of r_max. Both schemes then
        depend on V alone, and the ratio is taken at the worst of 33 values of V between its bounds.
        """
        parts = 1 + sum(1 + (scheme.wide is not None) for scheme in (own, rival) if scheme.narrow != REFERENCE)
        each = alpha / 2 / parts
        low_v, high_v = self._variance_bounds(self.tally.differences[REFERENCE], self._r_max / 2, each)
        low, high = math.inf, 0.0
        for v in np.geomspace(max(low_v, 1e-300), max(high_v, 1e-300), 33):
            cheap, dear = (self._cost_bounds(scheme, float(v), each) for scheme in (rival, own))
            low = min(low, cheap[0] / dear[1] if dear[1] > 0 else math.inf)
            high = max(high, cheap[1] / dear[0] if dear[0] > 0 else math.inf)
        return low, high

    def _cost_bounds(self, scheme: Scheme, v: float, alpha: float) -> tuple[float, float]:
        """Return bounds of S^2 of a scheme where the reference's variance of D is v."""
        slack = 0.0
        if scheme.narrow != REFERENCE:
            series = self.tally.corrections[scheme.narrow, REFERENCE]
            if series.counted:
                moved = binomial_upper(series.events, series.moments.total, alpha)
                square = self.tally.differences[REFERENCE].moments.average ** 2
                slack = (self._r_max / 2) ** 2 * moved + square
        path = self.costs.path(scheme.narrow)
        low, high = (math.sqrt(max(v + sign * slack, 0.0) * path) for sign in (-1.0, 1.0))
        if scheme.wide is not None:
            r = self._variance_bounds(self.tally.corrections[scheme.narrow, scheme.wide], self._r_max, alpha)
            cost = self.costs.correction(scheme.narrow, scheme.wide)
            low, high = low + math.sqrt(r[0] * cost), high + math.sqrt(r[1] * cost)
        return low * low, high * high

    def _variance_bounds(self, series: Series, largest: float, alpha: float) -> tuple[float, float]:
        """Return one-sided bounds, each at 1 - alpha, of a variance: counted below 20 events, else the jackknife."""
        n = series.moments.total
        if series.counted and series.events < FEW_EVENTS:
            p = binomial_lower(series.events, n, alpha)
            return series.smallest**2 * p * (1 - p), largest**2 * binomial_upper(series.events, n, alpha)
        with np.errstate(divide="ignore"):
            interval = jackknife(np.log(variances(series)), 2 * alpha).exponential()
        return interval.low, min(interval.high, largest**2 if series.counted else math.inf)


def breakeven(narrow: float, wide: float, correction: float) -> float:
    """Return the largest cost ratio x at which a split still costs less than the wide arm alone.

    The largest x with sqrt(V_narrow x) + sqrt(Var R (1 + x)) < sqrt(V_wide); 0 if Var R >= V_wide. It does not depend
    on the cost table.
    """
    if correction >= wide:
        return 0.0
    if correction == 0.0:
        return wide / narrow if narrow > 0 else math.inf

    def excess(x: float) -> float:
        return math.sqrt(narrow * x) + math.sqrt(correction * (1 + x)) - math.sqrt(wide)

    return float(optimize.brentq(excess, 0.0, wide / correction, xtol=1e-12, rtol=1e-12))
