"""Intervals: leave-one-batch-out jackknife with Student's t, and exact binomial bounds for counted events.

Jackknife: "The jackknife, the bootstrap and other resampling plans", CBMS-NSF monograph 38, SIAM, 1982,
doi 10.1137/1.9781611970319 (recalled from memory). Binomial bounds: "The use of confidence or fiducial limits
illustrated in the case of the binomial", Biometrika 26(4), 1934, doi 10.1093/biomet/26.4.404 (recalled from memory).
"""

from __future__ import annotations

import functools
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats

from narrowgauge.measure.moments import Series

__all__ = ["Interval", "binomial_lower", "binomial_upper", "combined", "jackknife", "means", "variances"]

Doubles = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Interval:
    """An estimate with its two-sided interval and standard error; infinite bounds mean that nothing is known."""

    estimate: float
    low: float
    high: float
    se: float

    def exponential(self) -> Interval:
        """Return the interval of exp of the figure; `se` becomes the relative one."""
        return Interval(estimate=_exp(self.estimate), low=_exp(self.low), high=_exp(self.high), se=self.se)

    @property
    def half_width(self) -> float:
        """Half of the interval's length."""
        return (self.high - self.low) / 2


def jackknife(replicates: Doubles, alpha: float) -> Interval:
    """Return the interval, at confidence 1 - alpha, of a figure: first over all batches, then without each one.

    The variance is (g - 1) / g times the sum of squared deviations of the g leave-one-out figures from their mean,
    Student's t has g - 1 degrees of freedom. Where a figure without some batch does not exist nothing is known.
    """
    return combined([replicates], replicates[0], alpha)


def combined(levels: Sequence[Doubles], estimate: float, alpha: float) -> Interval:
    """Return the interval of a figure of several levels: one batch of one level is left out at a time.

    `levels` holds, level by level, the whole figure first and then the figure without each batch of that level;
    variances add up, degrees of freedom follow Satterthwaite, "An approximate distribution of estimates of variance
    components", Biometrics Bulletin 2(6), 1946, doi 10.2307/3002019 (recalled from memory).
    """
    if not math.isfinite(estimate) or not all(np.isfinite(replicates).all() for replicates in levels):
        return Interval(estimate=float(estimate), low=-math.inf, high=math.inf, se=math.inf)
    parts = []
    for replicates in levels:
        g = replicates.size - 1
        deviation = replicates[1:] - replicates[1:].mean()
        with np.errstate(over="ignore"):
            parts.append((float((g - 1) / g * (deviation @ deviation)), g - 1))
    variance = sum(part for part, _ in parts)
    if variance == 0:
        return Interval(estimate=float(estimate), low=float(estimate), high=float(estimate), se=0.0)
    if not math.isfinite(variance):
        return Interval(estimate=float(estimate), low=-math.inf, high=math.inf, se=math.inf)
    dof = 1 / sum((part / variance) ** 2 / free for part, free in parts)  # shares: their squares stay in range
    se = math.sqrt(variance)
    reach = _student(1 - alpha / 2, dof) * se
    return Interval(estimate=float(estimate), low=float(estimate - reach), high=float(estimate + reach), se=se)


def variances(series: Series, extra: float = 0.0) -> Doubles:
    """Return the unbiased variance over all batches first, then without each; `extra` joins the sum of squares."""
    count, _, m2 = series.moments.leave_one_out()
    return (m2 + extra) / np.maximum(count - 1.0, 1.0)


def means(series: Series) -> Doubles:
    """Return the mean over all batches first, then without each batch."""
    return series.moments.leave_one_out()[1]


def binomial_upper(events: int, trials: int, alpha: float) -> float:
    """Return the exact one-sided upper bound of a probability, at confidence 1 - alpha; ln(1 / alpha) / N for none."""
    if trials == 0:
        return 1.0
    if events == 0:
        return min(1.0, math.log(1 / alpha) / trials)
    return 1.0 if events >= trials else float(stats.beta.ppf(1 - alpha, events + 1, trials - events))


def binomial_lower(events: int, trials: int, alpha: float) -> float:
    """Return the exact one-sided lower bound of a probability, at confidence 1 - alpha; 0 for no event."""
    return 0.0 if events == 0 else float(stats.beta.ppf(alpha, events, trials - events + 1))


@functools.lru_cache(maxsize=1024)
def _student(probability: float, dof: float) -> float:
    """Return a quantile of Student's t; asked for again and again, it takes longer than all the rest of an interval."""
    return float(stats.t.ppf(probability, dof))


def _exp(value: float) -> float:
    return math.exp(value) if value < 700 else math.inf
