"""The finest level where low precision still pays: on the ladder, beyond it, and over several quantities."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from scipy import stats

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.judge.accumulation import AccumulationFit, SignalDecay, correction_at, rejected
from narrowgauge.judge.asked import level_costs
from narrowgauge.judge.gain import Scheme
from narrowgauge.judge.schemes import LevelJudgement
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.arms import REFERENCE

__all__ = ["Beyond", "FinestLevel", "finest_on_ladder", "over_quantities"]

_FURTHEST = 40  # levels beyond the ladder at which the search ends
_ERROR_SHARE = 0.1  # of Var P: where the error is no longer small the law ends
_BATCH_DOF = 31
_OR_FINER = "or finer"


@dataclass(frozen=True, slots=True, kw_only=True)
class FinestLevel:
    """`level`: the largest l such that the format pays on every level up to l; `possible`: the largest not refuted.

    None where there is no such level; `reason` says why a figure is missing or where it ends. An extrapolated level
    is an estimate: there `possible` takes every bound of the extrapolation in the format's favour, and `cautious`
    against it, with the drift at its upper bound even where it is not significant; both are wider by the largest
    deviation of a level from the law. Nothing is extrapolated from a law that is rejected.
    """

    level: int | None
    possible: int | None
    extrapolated: bool
    reason: str | None
    cautious: int | None = None
    decided_by: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Beyond:
    """What the search beyond the ladder rests on, for one quantity and one format."""

    correction: AccumulationFit
    error: AccumulationFit
    decay: SignalDecay | None
    value_variance: float


def finest_on_ladder(
    levels: Sequence[LevelJudgement], quantity: str, name: str, *, file: AuditFile, beyond: Beyond, alpha: float
) -> FinestLevel:
    """Return the finest paying level of an arm for one quantity; beyond the ladder for a split over float64.

    Not beyond it with approximate draws: the law of rounding says nothing about them.
    """
    judged = [level.arms[quantity][name] for level in levels]
    paying = _leading(arm.verdict == "pays" for arm in judged)
    open_ended = _leading(arm.verdict != "does not pay" for arm in judged)
    numbers = [level.level for level in levels]
    level = numbers[paying - 1] if paying else None
    possible = numbers[open_ended - 1] if open_ended else None
    if paying < len(levels):
        reason = judged[paying].reason
        return FinestLevel(level=level, possible=possible, extrapolated=False, reason=reason)
    scheme = judged[-1].scheme
    if len(levels) == 1:
        return FinestLevel(level=level, possible=possible, extrapolated=False, reason="one level")
    if scheme is None or scheme.wide != REFERENCE or not Arm.named(name).exact:
        return FinestLevel(level=level, possible=None, extrapolated=False, reason=f"{_OR_FINER}, not extrapolated")
    return _extrapolated(numbers[-1], scheme, file, beyond, alpha)


def over_quantities(found: Mapping[str, FinestLevel]) -> FinestLevel:
    """Return the worst over the quantities, with the name of the one that decides.

    The smallest level, and of equal ones that with the smallest `possible`; a level "or finer" sets no limit.
    """

    def limit(one: FinestLevel) -> float:
        open_ended = one.reason is not None and one.reason.startswith(_OR_FINER)
        return math.inf if open_ended else -1 if one.possible is None else one.possible

    decider = min(found, key=lambda name: (-1 if found[name].level is None else found[name].level, limit(found[name])))
    worst = found[decider]
    possible = min(limit(one) for one in found.values())
    # Where the worst pays on every measured level so do all others, and another one may be the less certain.
    cautious = [one.cautious for one in found.values() if one.cautious is not None]
    return FinestLevel(
        level=worst.level,
        possible=int(possible) if 0 <= possible < math.inf else None,
        extrapolated=worst.extrapolated,
        reason=worst.reason,
        cautious=None if worst.cautious is None else min(cautious),
        decided_by=decider,
    )


def _leading(truths: Iterable[bool]) -> int:
    """Return how many leading entries are true."""
    count = 0
    for truth in truths:
        if not truth:
            break
        count += 1
    return count


def _extrapolated(finest: int, scheme: Scheme, file: AuditFile, beyond: Beyond, alpha: float) -> FinestLevel:
    if beyond.decay is None or beyond.correction.reason or beyond.error.reason:
        reason = f"{_OR_FINER}, too few levels to extrapolate"
        return FinestLevel(level=finest, possible=None, extrapolated=False, reason=reason)
    if rejected(beyond.correction) or rejected(beyond.error):
        reason = f"{_OR_FINER}, the law does not fit"
        return FinestLevel(level=finest, possible=None, extrapolated=False, reason=reason)
    quantile = float(stats.t.ppf(1 - alpha / 2, _BATCH_DOF))
    u = FORMATS[scheme.narrow].unit_roundoff
    low_factor, high_factor = _noise_factors(beyond.correction)
    ends = {"cautious": finest, "level": finest, "possible": finest}
    still = set(ends)
    reason = "extrapolated"
    for further in range(finest + 1, finest + 1 + _FURTHEST):
        steps = file.ladder.steps(further)
        if correction_at(beyond.error, steps, u, with_drift_high=False) > _ERROR_SHARE * beyond.value_variance:
            reason = "extrapolated to where the error is a tenth of the variance"
            break
        signal, spread = beyond.decay.at(further), 2.0 ** (quantile * beyond.decay.log2_se(further))
        noise = correction_at(beyond.correction, steps, u, with_drift_high=False)
        worst = correction_at(beyond.correction, steps, u, with_drift_high=True)
        pays = {
            "cautious": _edge(scheme, file, further, signal / spread, worst * high_factor) > 1,
            "level": _edge(scheme, file, further, signal, noise) > 1,
            "possible": _edge(scheme, file, further, signal * spread, noise * low_factor) >= file.worthwhile,
        }
        still = {name for name in still if pays[name]}
        ends |= dict.fromkeys(still, further)
        if not still:
            break
    return FinestLevel(
        level=ends["level"],
        possible=max(ends["level"], ends["possible"]),
        extrapolated=ends["level"] > finest,
        reason=reason,
        cautious=min(ends["level"], ends["cautious"]),
    )


def _noise_factors(fit: AccumulationFit) -> tuple[float, float]:
    """Return by which factors the fitted variance may be off: by the bounds of the walk, and by the largest misfit."""
    low, high = 1.0, 1.0
    if fit.walk and fit.walk_low is not None and fit.walk_high is not None:
        low, high = fit.walk_low / fit.walk, fit.walk_high / fit.walk
    # |fit / measured - 1| = d leaves measured between fit / (1 + d) and fit / (1 - d); from d = 1 on fit was too large.
    misfit = (fit.deviation or 0.0) / 100.0
    widest = 1.0 / (1.0 - misfit) if misfit < 1.0 else 1.0 + misfit
    return low / (1.0 + misfit), high * widest


def _edge(scheme: Scheme, file: AuditFile, level: int, signal: float, noise: float) -> float:
    """Return the edge of a split over float64 where the low branch has the variance signal + noise.

    A rival of more precision, alone or split, has the noise that the delta^2 law gives it.
    """
    costs, formats = level_costs(file, level), file.formats
    own = FORMATS[scheme.narrow]

    def split(name: str, correction: float) -> float:
        low = (signal + correction) * costs.path(name)
        return (math.sqrt(low) + math.sqrt(correction * costs.correction(name, REFERENCE))) ** 2

    rivals = [signal * costs.path(REFERENCE)]
    for name in dict.fromkeys([formats.today, *formats.wide]):
        if FORMATS[name].precision <= own.precision:
            continue
        if name == formats.today or "alone" in formats.schemes:
            rivals.append(signal * costs.path(name))
        elif name != REFERENCE:
            rivals.append(split(name, noise * (FORMATS[name].unit_roundoff / own.unit_roundoff) ** 2))
    return min(rivals) / split(scheme.narrow, noise)
