"""The law by which rounding accumulates over a ladder: Var E = u^2 (floor + walk n + drift n^2), n steps.

`walk` is the delta^2/h law: independent zero-mean roundings add up with the number of steps ("Rounding error
in numerical solution of stochastic differential equations", Stoch. Anal. Appl. 21(2), 2003,
doi 10.1081/SAP-120019286). `floor` is what the rounding of inputs, constants and the final operations leaves
at any step size, `drift` systematic rounding whose size differs from path to path. The same law serves the
error E and the correction R. Variances come in and go out plain; the coefficients are in units of u^2.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from itertools import groupby
from typing import Any, Literal, TypedDict

import numpy as np
from scipy.optimize import nnls
from scipy.stats import chi2, t

from narrowgauge.record.audit import REJECTED_BELOW, LawEntry

__all__ = [
    "AccumulationFit", "Agreement", "LawPoint", "Part", "SignalDecay", "agreement", "correction_at",
    "established", "fit", "rejected", "rules", "sentence", "signal_decay", "usable",
]  # fmt: skip

Part = Literal["floor", "walk", "drift"]
_Array = np.ndarray[Any, np.dtype[np.float64]]

_TOO_FEW = "too few usable levels"
_LEAST_LEVELS = 4
_LAW_ERROR = 0.01  # the law itself is good to about 1% of a variance; measured, no source
_REWEIGHTINGS = 2
_AGREEMENT = 0.05
_DECAY_LEVELS = 4
_PARTS: tuple[Part, ...] = ("floor", "walk", "drift")  # in order of the power of n
_WORDS: dict[Part, str] = {
    "floor": "rounding of inputs and final operations",
    "walk": "the walk of step roundings (delta^2/h)",
    "drift": "systematic rounding that differs from path to path (drift)",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class LawPoint:
    """The measured variance of E or R on one level.

    `se` is the jackknife standard error of `variance` and `dof` its degrees of freedom (31 for 32 batches),
    `mean` the mean of E or R, `value_variance` Var P of the reference on that level.
    """

    level: int
    steps: int
    variance: float
    se: float
    dof: float
    mean: float
    value_variance: float


@dataclass(frozen=True, slots=True, kw_only=True)
class AccumulationFit:
    """The fitted law; every figure is None when `reason` says why it was not fitted.

    `floor`, `walk` and `drift` are the fit with all three >= 0, in units of u^2. Their `_low` and `_high` are
    from the fit without that condition, cut at 0 and widened where they would miss the figure itself. `slope`
    is d log Var / d log n over the finer half of the levels, `deviation` the largest |fit / measured - 1| in
    per cent, `fit_p` the chi-square p-value, `levels` the levels used. `floor_without_drift` and
    `walk_without_drift` are the fit of these two parts alone, for use where the drift is not significant.
    """

    floor: float | None = None
    floor_low: float | None = None
    floor_high: float | None = None
    walk: float | None = None
    walk_low: float | None = None
    walk_high: float | None = None
    drift: float | None = None
    drift_low: float | None = None
    drift_high: float | None = None
    slope: float | None = None
    slope_low: float | None = None
    slope_high: float | None = None
    deviation: float | None = None
    fit_p: float | None = None
    floor_without_drift: float | None = None
    walk_without_drift: float | None = None
    levels: tuple[int, ...] = ()
    reason: str | None = None


class Agreement(TypedDict):
    """Whether `walk` is the same in every format; `spread` is largest / smallest - 1, or None."""

    agrees: bool | None
    spread: float | None
    lowest: str | None
    highest: str | None
    reason: str | None


@dataclass(frozen=True, slots=True, kw_only=True)
class SignalDecay:
    """V_l = 2^(a - beta l), with the covariance of (a, beta) as rows."""

    a: float
    beta: float
    covariance: tuple[tuple[float, float], tuple[float, float]]

    def at(self, level: float) -> float:
        """Return V_l on that level."""
        return float(2.0 ** (self.a - self.beta * level))

    def log2_se(self, level: float) -> float:
        """Return the standard error of log2 V_l on that level."""
        (aa, ab), (_, bb) = self.covariance
        return math.sqrt(max(0.0, aa - 2.0 * level * ab + level**2 * bb))


@dataclass(frozen=True, slots=True, kw_only=True)
class _Data:
    """What one fit works on, one row a level, by number of steps; `y` and `se` are divided by u^2."""

    n: _Array
    y: _Array
    se: _Array
    dof: _Array


def usable(points: Iterable[LawPoint]) -> list[LawPoint]:
    """Return the points, by level, to which the law applies: 0 < Var E <= .1 Var P and |mean E| <= .5 sd E.

    Beyond the first the error is no longer small against the value, beyond the second it is biased, and
    neither adds up like independent roundings. A variance of 0 has no relative size to be fitted.
    """
    return sorted(
        (
            point
            for point in points
            if _measurable(point)
            and point.variance <= 0.1 * point.value_variance
            and abs(point.mean) <= 0.5 * math.sqrt(point.variance)
        ),
        key=lambda point: point.level,
    )


def fit(
    points: Iterable[LawPoint], u: float, *, leave_out_coarsest: bool = False, confidence: float = 0.99
) -> AccumulationFit:
    """Return the law fitted to points that the caller found usable, in any order; `u` is the unit roundoff.

    Level 0 is left out when five others are there, and always with `leave_out_coarsest` (a correction: R_0
    has no coarse half). Points that are not finite or have no variance are passed over. With fewer than 4
    distinct numbers of steps nothing is fitted, and `reason` says so.

    Weighted least squares with weights 1 / (SE^2 + (.01 Var)^2), first of the measured variances, then twice of the
    fitted ones. The chi-square test counts the parts above 0 as fitted and takes the standard errors as known.
    """
    given = sorted(filter(_measurable, points), key=lambda point: (point.steps, point.level, point.variance))
    finer = [point for point in given if point.level != 0]
    if leave_out_coarsest:
        given = finer
    used = finer if len(finer) > _LEAST_LEVELS else given
    if len({point.steps for point in used}) < _LEAST_LEVELS:
        return AccumulationFit(reason=_TOO_FEW)

    data = _data(used, u)
    coefficients, fitted = _constrained(data, len(_PARTS))
    floor, walk, drift = (float(value) for value in coefficients)
    low, high = _coefficient_bounds(data, coefficients, fitted, confidence)
    (floor_alone, walk_alone), _ = _constrained(data, 2)
    slope, slope_half = _slope(_finer_half(given), u, confidence)
    misfit = float(np.sum((data.y - fitted) ** 2 / _squared_errors(data.se, fitted)))
    return AccumulationFit(
        floor=floor,
        floor_low=float(low[0]),
        floor_high=float(high[0]),
        walk=walk,
        walk_low=float(low[1]),
        walk_high=float(high[1]),
        drift=drift,
        drift_low=float(low[2]),
        drift_high=float(high[2]),
        slope=slope,
        slope_low=slope - slope_half,
        slope_high=slope + slope_half,
        deviation=100.0 * float(np.max(np.abs(fitted / data.y - 1.0))),
        fit_p=float(chi2.sf(misfit, len(used) - np.count_nonzero(coefficients))),
        floor_without_drift=float(floor_alone),
        walk_without_drift=float(walk_alone),
        levels=tuple(sorted(point.level for point in used)),
    )


def rejected(fit: AccumulationFit | LawEntry) -> bool:
    """Return whether the chi-square test rejects the law: p below 0.001, which is its false-alarm rate."""
    return fit.fit_p is not None and fit.fit_p < REJECTED_BELOW


def established(fit: AccumulationFit | LawEntry) -> tuple[float, float, float]:
    """Return floor, walk and drift as far as they are established: with the drift, or fitted without it."""
    if fit.floor is None or fit.walk is None or fit.drift is None:
        raise ValueError(f"the law is not fitted: {fit.reason}; accepted: a fit without a reason")
    if fit.drift_low is not None and fit.drift_low > 0.0:
        return fit.floor, fit.walk, fit.drift
    # Dropping the term alone would leave too little: part of the walk may have been fitted as drift.
    return fit.floor_without_drift or 0.0, fit.walk_without_drift or 0.0, 0.0


def rules(fit: AccumulationFit, steps: int) -> Part:
    """Return the largest part of the law at a number of steps; a drift that is not significant never rules.

    Raises ValueError when the law was not fitted.
    """
    sizes = [part * float(steps) ** power for power, part in enumerate(established(fit))]
    return _PARTS[sizes.index(max(sizes))]


def sentence(fit: AccumulationFit, arm: str, ladder: Sequence[tuple[int, int]]) -> str:
    """Return one sentence that says which part rules on which levels; `ladder` holds (level, steps).

    For example: "float16: rounding of inputs and final operations rules on levels 1-2, the walk of step roundings
    (delta^2/h) from level 3 on." A rejected law is said to fit badly. Raises ValueError for an empty ladder.
    """
    if not ladder:
        raise ValueError("sentence: the ladder is empty; accepted: at least one (level, steps)")
    if fit.reason is not None:
        return f"{arm}: the law is not fitted, {fit.reason}."
    # Each part grows faster than the one before it, so the levels that a part rules lie side by side.
    spans = [
        (_WORDS[part], [level for level, _ in group])
        for part, group in groupby(sorted(ladder), key=lambda rung: rules(fit, rung[1]))
    ]
    (first, _), (last, last_levels) = spans[0], spans[-1]
    if len(spans) == 1:
        return f"{arm}: {first} rules on every level{_badly(fit)}."
    clauses = [
        f"{words} on level {levels[0]}" if len(levels) == 1 else f"{words} on levels {levels[0]}-{levels[-1]}"
        for words, levels in spans[:-1]
    ]
    clauses[0] = f"{first} rules{clauses[0].removeprefix(first)}"
    return f"{arm}: {', '.join(clauses)}, {last} from level {last_levels[0]} on{_badly(fit)}."


def agreement(fits: Mapping[str, AccumulationFit]) -> Agreement:
    """Return whether walk is the same within 5% in all fitted arms: the delta^2 half of the delta^2/h law.

    Arms that were not fitted are passed over. `agrees` is None when nothing can be compared.
    """
    walks = {arm: one.walk for arm, one in fits.items() if one.walk is not None}
    if len(walks) < 2:
        return Agreement(agrees=None, spread=None, lowest=None, highest=None, reason="fewer than two arms were fitted")
    lowest, highest = min(walks, key=walks.__getitem__), max(walks, key=walks.__getitem__)
    if walks[highest] == 0.0:
        return Agreement(agrees=None, spread=None, lowest=None, highest=None, reason="walk is 0 in every arm")
    if walks[lowest] == 0.0:
        return Agreement(agrees=False, spread=None, lowest=lowest, highest=highest, reason=f"walk is 0 in {lowest}")
    spread = walks[highest] / walks[lowest] - 1.0
    return Agreement(agrees=spread <= _AGREEMENT, spread=spread, lowest=lowest, highest=highest, reason=None)


def correction_at(fit: AccumulationFit, steps: int, u: float, *, with_drift_high: bool) -> float:
    """Return the variance that the law gives at a number of steps, plain, not in units of u^2.

    The drift counts only if it is significant, else the other two parts are taken from their fit without it.
    With `with_drift_high` the upper bound of the drift takes its place, significant or not. Raises ValueError
    when the law was not fitted.
    """
    floor, walk, drift = established(fit)
    if with_drift_high and fit.drift_high is not None:
        drift = fit.drift_high
    n = float(steps)
    return u**2 * (floor + walk * n + drift * n**2)


def signal_decay(levels: Sequence[int], variances: Sequence[float], ses: Sequence[float]) -> SignalDecay | None:
    """Return V_l = 2^(a - beta l) through the four finest levels above 0, where V_0 is no difference.

    Weighted least squares of log2 V_l on l with weights from the standard errors of V_l, unweighted if one of
    them is 0; the covariance is that of the estimates at these weights. None if there are fewer than four
    such levels or one of the four has no positive finite variance.
    """
    rungs = sorted(rung for rung in zip(levels, variances, ses, strict=True) if rung[0] > 0)[-_DECAY_LEVELS:]
    if len(rungs) < _DECAY_LEVELS or not all(0.0 < v < math.inf and math.isfinite(se) for _, v, se in rungs):
        return None
    level, variance, se = (np.array(column, dtype=np.float64) for column in zip(*rungs, strict=True))
    errors = se / variance / math.log(2.0)
    design = np.stack([np.ones_like(level), -level], axis=1)
    gains = _gains(design, errors if np.all(errors > 0.0) else np.ones_like(errors))
    a, beta = gains @ np.log2(variance)
    (aa, ab), (ba, bb) = ((gains * errors**2) @ gains.T).tolist()
    return SignalDecay(a=float(a), beta=float(beta), covariance=((aa, ab), (ba, bb)))


def _badly(fit: AccumulationFit) -> str:
    shown = f"= {fit.fit_p:.1e}" if fit.fit_p else "< 1e-300"
    return f"; the law fits badly (p {shown})" if rejected(fit) else ""


def _measurable(point: LawPoint) -> bool:
    return 0.0 < point.variance < math.inf and math.isfinite(point.se) and math.isfinite(point.mean)


def _data(points: Sequence[LawPoint], u: float) -> _Data:
    return _Data(
        n=np.array([point.steps for point in points], dtype=np.float64),
        y=np.array([point.variance for point in points], dtype=np.float64) / u**2,
        se=np.array([point.se for point in points], dtype=np.float64) / u**2,
        dof=np.array([point.dof for point in points], dtype=np.float64),
    )


def _squared_errors(se: _Array, variance: _Array) -> _Array:
    return np.asarray(se**2 + (_LAW_ERROR * variance) ** 2)


def _powers(n: _Array, parts: int) -> _Array:
    return np.asarray(n[:, None] ** np.arange(parts))


def _constrained(data: _Data, parts: int) -> tuple[_Array, _Array]:
    """Return the first `parts` coefficients, all >= 0, and the variances they fit.

    Rows are divided by their errors and columns by their norms, so that neither variances of 1e-14 nor n^2 of
    2^40 reach the solver.
    """
    powers, fitted = _powers(data.n, parts), data.y
    coefficients = np.zeros(parts)
    for _ in range(1 + _REWEIGHTINGS):
        errors = np.sqrt(_squared_errors(data.se, fitted))
        rows = powers / errors[:, None]
        norms = np.linalg.norm(rows, axis=0)
        solution, _residual = nnls(rows / norms, data.y / errors)
        coefficients = solution / norms
        fitted = powers @ coefficients
    return coefficients, fitted


def _gains(design: _Array, errors: _Array) -> _Array:
    """Return G, (columns, rows): G @ y is the weighted least squares solution for y with these errors."""
    rows = design / errors[:, None]
    norms = np.linalg.norm(rows, axis=0)
    return np.asarray(np.linalg.pinv(rows / norms) / norms[:, None] / errors)


def _half_widths(gains: _Array, se: _Array, law: _Array, dof: _Array, confidence: float) -> _Array:
    """Return half the width of the Student t interval of each row of gains @ y.

    The squared error of a level is that of its sample, se^2 with its degrees of freedom, and that of the law, law^2,
    which is known. Degrees of freedom of the sum: F. E. Satterthwaite, "An approximate distribution of estimates of
    variance components", Biometrics Bulletin 2(6), 1946, doi 10.2307/3002019 (recalled from memory).
    """
    sampled = gains**2 * se**2
    total = np.sum(sampled + gains**2 * law**2, axis=1)
    uncertain = np.sum(sampled**2 / dof, axis=1)
    degrees = np.divide(total**2, uncertain, out=np.full_like(total, np.inf), where=uncertain > 0.0)
    return np.asarray(t.ppf((1.0 + confidence) / 2.0, degrees) * np.sqrt(total))


def _coefficient_bounds(data: _Data, coefficients: _Array, fitted: _Array, confidence: float) -> tuple[_Array, _Array]:
    """Return lower and upper bounds of the three coefficients from the fit that may go below 0, cut at 0."""
    gains = _gains(_powers(data.n, len(_PARTS)), np.sqrt(_squared_errors(data.se, fitted)))
    free = gains @ data.y
    half = _half_widths(gains, data.se, _LAW_ERROR * fitted, data.dof, confidence)
    # The figure itself lies outside only where a part is far below 0, that is where the law does not hold.
    low = np.minimum(np.maximum(free - half, 0.0), coefficients)
    return low, np.maximum(free + half, coefficients)


def _finer_half(points: Sequence[LawPoint]) -> list[LawPoint]:
    """Return the points with the finer half of the step counts, the middle one included."""
    counts = sorted({point.steps for point in points})
    return [point for point in points if point.steps >= counts[len(counts) // 2]]


def _slope(points: Sequence[LawPoint], u: float, confidence: float) -> tuple[float, float]:
    """Return d log Var / d log n by weighted least squares, and half the width of its interval."""
    data = _data(points, u)
    relative = data.se / data.y
    law = np.full_like(relative, _LAW_ERROR)
    gains = _gains(np.stack([np.ones_like(data.n), np.log(data.n)], axis=1), np.hypot(relative, law))
    half = _half_widths(gains, relative, law, data.dof, confidence)
    return float((gains @ np.log(data.y))[1]), float(half[1])
