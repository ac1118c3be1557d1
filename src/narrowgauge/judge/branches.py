"""What a mismatch of the two branches of a split comes to: distances in ulps, and the bias of the estimate.

A split adds the mean of D over many paths of the low branch to the mean of D_wide - D_low over few paths of the
correction. Where the two D_low are not the same numbers the estimate is off by the mean of their difference, the
mismatch, whatever the number of paths.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import FORMATS, Format
from narrowgauge.judge.intervals import Interval, binomial_upper, jackknife, means
from narrowgauge.judge.schemes import LEAST_EFFECTIVE_SIZE, budget_levels, rmse_of
from narrowgauge.kernel.arms import wider
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.moments import Series

__all__ = ["bias", "differs", "share_of", "split_formats", "ulps", "wide_formats", "within"]

Doubles = npt.NDArray[np.float64]


def split_formats(file: AuditFile) -> tuple[str, ...]:
    """Return the formats that could be the narrow half of a split, least precise first."""
    if "split" not in file.formats.schemes:
        return ()
    known = {*file.formats.narrow, *file.formats.wide}
    return tuple(name for name in file.used_formats if name in known and wide_formats(file, name))


def wide_formats(file: AuditFile, narrow: str) -> tuple[str, ...]:
    """Return the formats that could be the wide half of a split with a narrow one."""
    return tuple(name for name in file.formats.wide if name in FORMATS and wider(name, narrow))


def differs(here: Doubles, there: Doubles) -> npt.NDArray[np.bool_]:
    """Return where two results have other bits: zeros of two signs differ, NaN and NaN do not."""
    return np.asarray((here.view(np.int64) != there.view(np.int64)) & ~(np.isnan(here) & np.isnan(there)))


def ulps(here: Doubles, there: Doubles, form: Format) -> Doubles:
    """Return how far two results are apart in ulps of the larger one; infinite where one of them is not finite.

    For 2^e <= |x| < 2^(e + 1) an ulp is 2^(e - p + 1), and never less than the smallest subnormal.
    """
    with np.errstate(all="ignore"):
        larger = np.maximum(np.abs(here), np.abs(there))
        exponent = np.maximum(np.frexp(larger)[1] - form.precision, form.emin - form.precision + 1)
        apart = np.ldexp(np.abs(here - there), -exponent)
    return np.where(np.isfinite(apart), apart, math.inf)


def bias(mismatch: Series, differing: int, largest: float, alpha: float) -> Interval:
    """Return the mean of a mismatch with its interval at confidence 1 - alpha.

    The jackknife over batches, where the paths that differ are many and none rules; else, since a sample of few does
    not know what it misses, plus or minus twice the largest size seen times the exact binomial bound of their share.
    """
    moments = mismatch.moments
    if mismatch.nonfinite or not math.isfinite(largest):
        return Interval(estimate=math.nan, low=-math.inf, high=math.inf, se=math.inf)
    if not differing:
        return Interval(estimate=0.0, low=0.0, high=0.0, se=0.0)
    found = jackknife(means(mismatch), alpha)
    if differing >= LEAST_EFFECTIVE_SIZE and mismatch.effective_size >= LEAST_EFFECTIVE_SIZE:
        return found
    reach = 2.0 * largest * binomial_upper(differing, moments.total, alpha / 2)
    low, high = min(found.low, -reach), max(found.high, reach)
    return Interval(estimate=found.estimate, low=low, high=high, se=found.se)


def share_of(file: AuditFile, quantity: str) -> float | None:
    """Return by how much the mean of one level may be shifted, in the unit of the quantity; None without a target."""
    rmse = rmse_of(file, quantity)
    return None if rmse is None or file.target is None else file.target.bias_share * rmse / budget_levels(file)


def within(file: AuditFile, biases: Mapping[str, Interval]) -> bool:
    """Whether the audit file allows a mismatch of these biases by quantity: each inside the level's share."""
    if file.branches is None or file.branches.allow is None:
        return False
    shares = {name: share_of(file, name) for name in biases}
    return all(
        (share := shares[name]) is not None and -share <= one.low and one.high <= share for name, one in biases.items()
    )
