"""Shares of single lines, inputs and constants in a variance, from runs on the same paths.

With E the error when everything is rounded, E_i when i alone is, and E_-i when all but i are:

    alone share   Var E_i / Var E            what i does by itself
    saved share   1 - Var E_-i / Var E       what is saved where i alone is not rounded
    share         their mean

To first order E is the sum of the E_i. What two parts do together (a common sign, say) enters no alone share and both
saved shares, so that the alone shares add up to the whole less it, the saved ones to the whole and as much more, and
the means to the whole. All runs see the same draws: differences of variances are those of one sample.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from narrowgauge.judge.intervals import Interval, jackknife, variances
from narrowgauge.measure.moments import Series

__all__ = ["Share", "Shares", "leading", "shares_of"]

Doubles = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Share:
    """The share of one part, three ways."""

    alone: Interval
    saved: Interval
    mean: Interval


@dataclass(frozen=True, slots=True, kw_only=True)
class Shares:
    """The shares by part, and to what they add up; `reason` says why there are none."""

    parts: Mapping[str, Share]
    alone: Interval | None
    saved: Interval | None
    mean: Interval | None
    reason: str | None


def shares_of(whole: Series, alone: Mapping[str, Series], saved: Mapping[str, Series], alpha: float) -> Shares:
    """Return the shares of parts, by name, in the variance of `whole`, each with its interval at 1 - alpha.

    Intervals are those of the jackknife over batches of paths. A part whose runs have a value that is not finite has
    infinite bounds and no estimate (NaN).
    """
    if whole.nonfinite:
        return _none("values that are not finite")
    total = variances(whole)
    if not (np.all(total > 0) and np.all(np.isfinite(total))):
        return _none("no error that varies")
    rows = {name: (variances(alone[name]) / total, 1.0 - variances(saved[name]) / total) for name in alone}
    lost = [name for name in alone if alone[name].nonfinite or saved[name].nonfinite]
    parts = {name: _share(*rows[name], alpha) if name not in lost else _UNKNOWN for name in rows}
    if lost:
        return Shares(
            parts=parts, alone=None, saved=None, mean=None, reason="values that are not finite in single runs"
        )
    first, second = (np.sum([row[place] for row in rows.values()], axis=0) for place in (0, 1))
    together = _share(first, second, alpha)
    return Shares(parts=parts, alone=together.alone, saved=together.saved, mean=together.mean, reason=None)


def leading(shares: Sequence[Shares], least: float) -> list[str]:
    """Return the parts whose saved share reaches `least` in any of these, the one that saves most first."""
    most: dict[str, float] = {}
    for one in shares:
        for name, share in one.parts.items():
            if math.isfinite(share.saved.estimate):
                most[name] = max(most.get(name, -math.inf), share.saved.estimate)
    return sorted((name for name in most if most[name] >= least), key=lambda name: -most[name])


def _share(alone: Doubles, saved: Doubles, alpha: float) -> Share:
    return Share(
        alone=jackknife(alone, alpha), saved=jackknife(saved, alpha), mean=jackknife((alone + saved) / 2, alpha)
    )


def _none(reason: str) -> Shares:
    return Shares(parts={}, alone=None, saved=None, mean=None, reason=reason)


_NOTHING = Interval(estimate=math.nan, low=-math.inf, high=math.inf, se=math.inf)
_UNKNOWN = Share(alone=_NOTHING, saved=_NOTHING, mean=_NOTHING)
