"""The finest level where low precision still pays: on the ladder, beyond it, and over several quantities."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from scipy import stats

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.judge.accumulation import AccumulationFit, SignalDecay, correction_at
from narrowgauge.judge.gain import Scheme
from narrowgauge.judge.schemes import LevelJudgement, level_costs
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.arms import REFERENCE

__all__ = ["Beyond", "FinestLevel", "finest_on_ladder", "over_quantities"]

_FURTHEST = 40  # levels beyond the ladder at which the search ends
_ERROR_SHARE = 0.1  # of Var P: where the error is no longer small the law ends
_BATCH_DOF = 31


@dataclass(frozen=True, slots=True, kw_only=True)
class FinestLevel:
    """`level`: the largest l such that the format pays on every level up to l; `possible`: the largest not refuted.

    None where there is no such level; `reason` says why a figure is missing or where it ends. An extrapolated level
    is an estimate: there `possible` takes every bound of the extrapolation in the format's favour, and `cautious`
    against it, with the drift at its upper bound even where it is not significant.
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
    """Return the finest paying level of a format for one quantity; beyond the ladder for a split over float64."""
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
    if scheme is None or scheme.wide != REFERENCE:
        return FinestLevel(level=level, possible=None, extrapolated=False, reason="or finer, not extrapolated")
    return _extrapolated(numbers[-1], scheme, file, beyond, alpha)


def over_quantities(found: Mapping[str, FinestLevel]) -> FinestLevel:
    """Return the worst over the quantities, with the name of the one that decides."""
    decider = min(found, key=lambda name: -1 if found[name].level is None else found[name].level or 0)
    worst = found[decider]
    limits = [one.possible for one in found.values() if one.reason != "or finer, not extrapolated"]
    known = [-1 if limit is None else limit for limit in limits]
    possible = min(known) if known else None
    return FinestLevel(
        level=worst.level,
        possible=None if possible in (None, -1) else possible,
        extrapolated=worst.extrapolated,
        reason=worst.reason,
        cautious=worst.cautious,
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
        return FinestLevel(
            level=finest, possible=None, extrapolated=False, reason="or finer, too few levels to extrapolate"
        )
    quantile = float(stats.t.ppf(1 - alpha / 2, _BATCH_DOF))
    u = FORMATS[scheme.narrow].unit_roundoff
    low_factor, high_factor = _walk_factors(beyond.correction)
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


def _walk_factors(fit: AccumulationFit) -> tuple[float, float]:
    """Return by which factors the bounds of the walk move the fitted variance."""
    if not fit.walk or fit.walk_low is None or fit.walk_high is None:
        return 1.0, 1.0
    return fit.walk_low / fit.walk, fit.walk_high / fit.walk


def _edge(scheme: Scheme, file: AuditFile, level: int, signal: float, noise: float) -> float:
    """Return the edge of a split over float64 where the low branch has the variance signal + noise."""
    costs = level_costs(file, level)
    rivals = {REFERENCE, *(file.formats.wide if "alone" in file.formats.schemes else ())}
    cheapest = min(costs.path(name) for name in rivals if FORMATS[name].precision > FORMATS[scheme.narrow].precision)
    low = ((signal + noise) * costs.path(scheme.narrow)) ** 0.5
    correction = (noise * costs.correction(scheme.narrow, REFERENCE)) ** 0.5
    return float(signal * cheapest / (low + correction) ** 2)
