"""Which of the two costs the accuracy: what arithmetic, approximate draws and both together put into a correction.

R is that to the reference: of the format with exact draws (arithmetic), of float64 with approximate draws (draws), of
the format with approximate draws (both).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from narrowgauge.judge.intervals import Interval, combined, jackknife, variances
from narrowgauge.judge.schemes import LEAST_EFFECTIVE_SIZE
from narrowgauge.kernel.arms import Arm
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.moments import Series
from narrowgauge.measure.tally import QuantityTally

__all__ = ["Order", "Parts", "Side", "order", "parts", "slope"]

Side = Literal["arithmetic", "draws"]

_LEAST_LEVELS = 4


@dataclass(frozen=True, slots=True, kw_only=True)
class Parts:
    """The corrections of one format on one level; None for an arm that did not come to an end.

    `ratio` is Var R of the draws over that of the arithmetic, None where one of them is not to be trusted; `larger` the
    part that its interval shows to be larger.
    """

    arithmetic: Series | None
    draws: Series | None
    both: Series | None
    ratio: Interval | None
    larger: Side | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Order:
    """The order in h of Var R over some levels: Var R ~ h^order; None where `reason` says why there is none."""

    slope: Interval | None
    levels: tuple[int, ...]
    reason: str | None


def parts(tally: QuantityTally, name: str, alpha: float) -> Parts:
    """Return what arithmetic, draws and both do to the correction of a format, by name, on one level."""
    cheap = {form: Arm(form, "approximate").name for form in (name, REFERENCE)}
    arithmetic, draws, both = (tally.corrections.get((arm, REFERENCE)) for arm in (name, cheap[REFERENCE], cheap[name]))
    ratio, larger = None, None
    if arithmetic is not None and draws is not None and _trusted(arithmetic) and _trusted(draws):
        ratio = jackknife(np.log(variances(draws)) - np.log(variances(arithmetic)), alpha).exponential()
        larger = _larger(ratio)
    return Parts(arithmetic=arithmetic, draws=draws, both=both, ratio=ratio, larger=larger)


def order(corrections: Mapping[int, Series], refinement: int, alpha: float) -> Order:
    """Return the order of Var R in h over the finer half of the levels that can be used, of `corrections` by level.

    Those are the levels above 0, where R is a difference of differences, with a variance whose sample is to be trusted.
    Least squares of log Var R on the level, all levels alike: weights from standard errors would favour levels whose
    rare large corrections happen to be missing.
    """
    found = sorted(level for level, series in corrections.items() if level > 0 and _trusted(series))
    if len(found) < _LEAST_LEVELS:
        return Order(slope=None, levels=(), reason="too few usable levels")
    levels = found[len(found) // 2 :]
    fitted = slope({level: corrections[level] for level in levels}, refinement, alpha)
    return Order(slope=fitted, levels=tuple(levels), reason=None)


def slope(corrections: Mapping[int, Series], refinement: int, alpha: float) -> Interval:
    """Return the least-squares slope of log Var R in log h over all levels given, at least two, with its interval."""
    levels = np.array(list(corrections))
    logs = [np.log(variances(series)) for series in corrections.values()]
    centred = levels - levels.mean()
    weights = -centred / (centred @ centred) / math.log(refinement)
    estimate = float(sum(weight * log[0] for weight, log in zip(weights, logs, strict=True)))
    replicates = [estimate + weight * (log - log[0]) for weight, log in zip(weights, logs, strict=True)]
    return combined(replicates, estimate, alpha)


def _trusted(series: Series) -> bool:
    """Whether a sample variance of a correction can be believed: it is finite, and many paths carry it."""
    known = not series.nonfinite and 0.0 < series.moments.variance < math.inf
    return known and series.effective_size >= LEAST_EFFECTIVE_SIZE


def _larger(ratio: Interval) -> Side | None:
    if ratio.low > 1.0:
        return "draws"
    return "arithmetic" if ratio.high < 1.0 else None
