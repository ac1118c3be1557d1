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

from narrowgauge.judge.costbounds import CostBounds, Side
from narrowgauge.judge.intervals import Interval, binomial_lower, binomial_upper, jackknife, means, variances
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.audittables import CostTable
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.moments import Series
from narrowgauge.measure.tally import QuantityTally

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
    """Costs on one level: `steps` of fine and coarse path together, `draws` of one path, and the cost table.

    Arms of one kind of draws share them; where a correction branch takes both kinds it pays for both.
    """

    steps: int
    draws: int
    table: CostTable

    def path(self, arm: str) -> float:
        """Return the cost of one path in one arm."""
        return self.steps * self.table.step(Arm.named(arm).format) + self._fixed(arm)

    def correction(self, narrow: str, wide: str) -> float:
        """Return the cost of one path of a correction branch: both arms' steps, draws and fixed part once."""
        steps = self.table.step(Arm.named(narrow).format) + self.table.step(Arm.named(wide).format)
        return self.steps * steps + self._fixed(narrow, wide)

    def _fixed(self, *arms: str) -> float:
        kinds = dict.fromkeys(Arm.named(arm).draws for arm in arms)
        return self.draws * sum(self.table.draw(kind) for kind in kinds) + self.table.path


class LevelView:
    """One quantity on one level: the variances of every arm and pair, with and without each batch.

    `largest_correction` is a declared bound on |P^wide - P^narrow|, or None. A level difference has two such changes,
    so that it is doubled where there is a coarse path to bound |R|. Without it |R| is taken as at most twice the range
    of the values seen and 0, which is twice the largest |P| for a quantity of one sign.
    """

    def __init__(self, tally: QuantityTally, costs: LevelCosts, largest_correction: float | None) -> None:
        self.tally = tally
        self.costs = costs
        self._logarithms: dict[tuple[Scheme, bool], Doubles] = {}
        ranges = [_range(series) for series in tally.values.values()]
        ranges += [series.largest for series in tally.differences.values()]
        # Any two level differences lie no further apart than that, hence also the two in R.
        self._apart = 2.0 * max(ranges, default=0.0)
        self._r_max = self._apart
        if largest_correction is not None:
            self._r_max = largest_correction * (1.0 if tally.coarse is None else 2.0)

    def correction(self, scheme: Scheme) -> Series | None:
        """Return the series that a scheme's risk rests on: its correction, or the arm's against the reference."""
        narrow = scheme.narrow
        wide = REFERENCE if scheme.wide is None else scheme.wide
        return None if narrow == REFERENCE else self.tally.corrections[narrow, wide]

    def logarithm(self, scheme: Scheme, cautious: bool = False) -> Doubles:
        """Return log S^2, the cost at unit variance, over all batches first and then without each batch.

        `cautious` adds four corrections of the largest size seen to the sum of squares. Every comparison of the scheme
        asks for it: it is computed once.
        """
        key = scheme, cautious
        if key not in self._logarithms:
            self._logarithms[key] = self._logarithm(scheme, cautious)
        return self._logarithms[key]

    def _logarithm(self, scheme: Scheme, cautious: bool) -> Doubles:
        risk = self.correction(scheme)
        extra = _unseen(risk) if cautious and risk is not None else 0.0
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
        if own == rival:
            return Interval(estimate=1.0, low=1.0, high=1.0, se=0.0)
        with np.errstate(invalid="ignore"):
            point = jackknife(self.logarithm(rival) - self.logarithm(own), alpha)
            if self.few(own) or self.few(rival):
                low, high = self.bounds(own, rival, alpha).ratio()
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
        bound = max(self._r_max, series.largest) * binomial_upper(series.events, series.moments.total, alpha)
        return Interval(estimate=interval.estimate, low=-bound, high=bound, se=interval.se)

    def few(self, scheme: Scheme) -> bool:
        """Whether a scheme's correction, or a level difference in the comparison, has too few events to average."""
        found = [self.tally.differences[REFERENCE], self.tally.differences[scheme.narrow], self.correction(scheme)]
        return any(series is not None and _too_few(series) for series in found)

    def bounds(self, own: Scheme, rival: Scheme, alpha: float) -> CostBounds:
        """Return bounds of S of two schemes, from bounds of every variance in them, which share out alpha / 2.

        V is bounded on both sides, every other variance on the side that counts: what is concluded from the bounds
        holds on each side with probability 1 - alpha / 2.
        """
        parts = 2 + sum(1 + (scheme.wide is not None) for scheme in (own, rival) if scheme.narrow != REFERENCE)
        each = alpha / 2 / parts
        return CostBounds(
            v=self._variance_bounds(self.tally.differences[REFERENCE], self._apart, each),
            own=self._cost_bounds(own, each),
            rival=self._cost_bounds(rival, each),
            same=own == rival,
        )

    def correction_high(self, scheme: Scheme, alpha: float) -> float | None:
        """Return the upper bound, at 1 - alpha, of the variance of a split's correction with too few events.

        None for a correction with enough of them, whose sample variance is to be trusted, and for a scheme without one.
        """
        if scheme.wide is None:
            return None
        series = self.tally.corrections[scheme.narrow, scheme.wide]
        return self._variance_bounds(series, self._r_max, alpha)[1] if _too_few(series) else None

    def _cost_bounds(self, scheme: Scheme, alpha: float) -> tuple[Side, Side]:
        """Return the lower and the upper bound of a scheme's S as functions of the reference's V."""
        path = self.costs.path(scheme.narrow)
        rest = (0.0, 0.0)
        if scheme.wide is not None:
            r = self._variance_bounds(self.tally.corrections[scheme.narrow, scheme.wide], self._r_max, alpha)
            cost = self.costs.correction(scheme.narrow, scheme.wide)
            rest = (math.sqrt(r[0] * cost), math.sqrt(r[1] * cost))
        low, high = self._narrow_bounds(scheme.narrow, alpha)
        return (
            Side(slope=low[0], offset=low[1], cost=path, rest=rest[0]),
            Side(slope=high[0], offset=high[1], cost=path, rest=rest[1]),
        )

    def _narrow_bounds(self, narrow: str, alpha: float) -> tuple[tuple[float, float], tuple[float, float]]:
        """Return (slope, offset) of a lower and an upper bound of Var D^narrow as a function of the reference's V.

        With few corrections: on a share q of the paths D^narrow = Y and D^ref = X differ, and from any c
        (Y - c)^2 - (X - c)^2 = (Y - X)(Y + X - 2 c). For c = E X its mean is at least Var Y - V, for c = E Y at most;
        all of these lie within a width w of each other and |Y - X| <= r, so |Var Y - V| <= w min(w, 2 r) q.
        """
        if narrow == REFERENCE:
            return (1.0, 0.0), (1.0, 0.0)
        reference, own = self.tally.differences[REFERENCE], self.tally.differences[narrow]
        correction = self.tally.corrections[narrow, REFERENCE]
        if _too_few(correction):
            share = binomial_upper(correction.events, correction.moments.total, alpha)
            r_max = max(self._r_max, correction.largest)
            slack = self._apart * min(self._apart, 2 * r_max) * share
            return (1.0, -slack), (1.0, slack)
        if _too_few(reference) or _too_few(own):
            low, high = self._variance_bounds(own, self._apart, alpha)
            return (0.0, low), (0.0, high)
        extra = _unseen(correction)
        with np.errstate(divide="ignore", invalid="ignore"):
            v = np.log(variances(reference))
            interval = jackknife(np.log(variances(own)) - v, 2 * alpha).exponential()
            cautious = jackknife(np.log(variances(own, extra)) - v, 2 * alpha).exponential()
        return (interval.low, 0.0), (max(interval.high, cautious.high), 0.0)

    def _variance_bounds(self, series: Series, largest: float, alpha: float) -> tuple[float, float]:
        """Return one-sided bounds, each at 1 - alpha, of a variance: counted below 20 events, else the jackknife.

        Counted, with p the probability that the figure is not 0: at least the square of the smallest size times
        p (1 - p), which is smallest at one end of p, at most the square of the largest size times p.
        """
        n, largest = series.moments.total, max(largest, series.largest)
        if _too_few(series):
            p, q = binomial_lower(series.events, n, alpha), binomial_upper(series.events, n, alpha)
            return series.smallest * series.smallest * min(p * (1 - p), q * (1 - q)), largest * largest * q
        with np.errstate(divide="ignore"):
            interval = jackknife(np.log(variances(series)), 2 * alpha).exponential()
            cautious = jackknife(np.log(variances(series, _unseen(series))), 2 * alpha).exponential()
        high = max(interval.high, cautious.high)
        return interval.low, min(high, largest * largest) if series.counted else high


def breakeven(narrow: float, wide: float, correction: float) -> float:
    """Return the largest cost ratio x at which a split still costs less than the wide arm alone.

    The largest x with sqrt(V_narrow x) + sqrt(Var R (1 + x)) < sqrt(V_wide); 0 if Var R >= V_wide. It does not depend
    on the cost table. Squared, the equation is quadratic in sqrt(x); this is its least positive root.
    """
    if correction >= wide:
        return 0.0
    if narrow == correction == 0.0:
        return math.inf
    roots = math.sqrt(narrow) * math.sqrt(wide) + math.sqrt(correction) * math.sqrt(narrow + (wide - correction))
    root = (wide - correction) / roots
    return root * root  # not ** 2, which raises where it overflows


def _too_few(series: Series) -> bool:
    return series.counted and series.events < FEW_EVENTS


def _unseen(series: Series) -> float:
    return _UNSEEN * series.largest * series.largest


def _range(series: Series) -> float:
    """Return the range of the values seen and 0; the largest magnitude where single values are not known."""
    seen: list[float] = [0.0, *(series.distinct or ())]
    return max(series.largest, max(seen) - min(seen))
