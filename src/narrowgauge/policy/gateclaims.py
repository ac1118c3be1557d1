"""The claims of a policy that rest on a sample: each a fresh figure with bounds, and the limit that it has to keep."""

from __future__ import annotations

import functools
import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

from narrowgauge.policy.gatefigures import (
    REFERENCE,
    Bounds,
    Costs,
    Spread,
    arms_of,
    confidence_of,
    gain,
    looks_of,
    quantile,
    rmse,
)
from narrowgauge.record.audit import ArmEntry, AuditRecord, LevelEntry
from narrowgauge.record.gate import Check, Finding, State
from narrowgauge.record.policy import ArmPart, LevelPart, PolicyDocument, SharePart

__all__ = ["BATCHES", "RESOLUTION", "SHARES", "Claim", "beside", "claims_of", "counted_shares"]

BATCHES = 32  # of a block: what a standard error of the record rests on
RESOLUTION = 0.9  # of a gain or an edge: how near to its limit the lower bound has to come
_TIMES, _TIMES_FEW, _FEW = 1.5, 2.0, 200  # the ratio of error variances, and the effective size below which it is 2
_OF_SPREAD = 0.1  # of the error's standard deviation: a mean error below that is not told from none
_TIMES_TARGET, _TIMES_SHARE = 1.1, 1.25
_SHARES: Final[tuple[tuple[Check, str, str], ...]] = (
    ("lost additions", "lost_additions", "lost"),
    ("subnormals", "subnormals", "below"),
)
SHARES = tuple(check for check, _, _ in _SHARES)
_MANY = 10**6  # degrees of freedom that make no difference any more
_NONE_SEEN = 10.0  # events of which none is seen in 1 of 20,000 samples


@dataclass(frozen=True, slots=True, kw_only=True)
class Claim:
    """One claim: `bounds` gives the fresh figure at a two-sided error rate, None where it does not exist.

    `figure` is what it is, in words; it has to be at most `limit`, or with `at_least` no less. `paths` are those of
    the level, the least of all levels for a claim on the whole. What does not fail holds where it is `settled`: more
    paths are not to be had for it.
    """

    check: Check
    level: int | None
    quantity: str
    arm: str | None
    figure: str
    limit: float
    at_least: bool
    paths: int
    bounds: Callable[[float], Bounds | None]
    settled: bool = False

    def finding(self, *, state: State, bounds: Bounds | None, paths_needed: int | None) -> Finding:
        """Return what came of it."""
        side = "at least" if self.at_least else "at most"
        if bounds is None:
            message = f"{self.figure} does not exist"
        else:
            shown = [beside(value, self.limit) for value in (bounds.estimate, bounds.low, bounds.high)]
            message = f"{self.figure} is {shown[0]} ({shown[1]} to {shown[2]}), {side} {self.limit:.4g} is accepted"
        if state == "undecided" and paths_needed is not None:
            where = "on every level" if self.level is None else "of the level"
            message += f"; about {paths_needed:,} paths {where} would decide"
        return Finding(
            check=self.check,
            level=self.level,
            quantity=self.quantity,
            arm=self.arm,
            state=state,
            message=message,
            compared=f"{self.figure}, {side} the limit",
            estimate=None if bounds is None else _finite(bounds.estimate),
            low=None if bounds is None else _finite(bounds.low),
            high=None if bounds is None else _finite(bounds.high),
            limit=self.limit,
            paths_needed=paths_needed,
        )


def claims_of(policy: PolicyDocument, record: AuditRecord, *, counted: bool = False) -> Iterator[Claim]:
    """Return every claim of a policy, quantity by quantity and level by level; the whole of a quantity comes last.

    `counted`: lost additions and subnormals are to be counted, so that it is open what a record does not say of them.
    """
    costs, first = Costs(policy.cost, record.asked), next(iter(record.quantities))
    for name, quantity in record.quantities.items():
        reaches = [_Reach(level) for level in quantity.levels]
        for plan, level, reach in zip(policy.levels, quantity.levels, reaches, strict=True):
            view = _Level(policy, record, plan, level, name=name, reach=reach)
            below = quantity.levels[level.level - 1].steps if level.level else 0
            yield from view.telescoping()
            if name == first:  # operations are those of all quantities
                yield from view.shares(counted=counted)
            for arm in arms_of(plan):
                if arm != REFERENCE:
                    yield from view.errors(arm)
            yield from view.bias()
            yield from view.gains(costs, below)
        planned = {plan.level: plan for plan in policy.levels}
        levels = {level.level: level for level in quantity.levels}
        limit = policy.target.rmse[name]

        yield Claim(
            check="rmse",
            level=None,
            quantity=name,
            arm=None,
            figure=f"{name}: the root-mean-square error with the planned paths, over the target,",
            limit=_TIMES_TARGET,
            at_least=False,
            paths=min(level.paths for level in quantity.levels),
            bounds=functools.partial(_whole, planned, levels, reaches, limit),
        )


def counted_shares(policy: PolicyDocument, quantity: str) -> int:
    """Return how many shares of its own arms a policy has counted, whether or not a record says anything of them."""
    parts = [plan.measured[quantity].arms.get(arm) for plan in policy.levels for arm in arms_of(plan)]
    return sum(isinstance(getattr(part, known, None), SharePart) for part in parts for _, known, _ in _SHARES)


def _whole(
    planned: Mapping[int, LevelPart],
    levels: Mapping[int, LevelEntry],
    reaches: Sequence[_Reach],
    target: float,
    alpha: float,
) -> Bounds | None:
    """Return the root-mean-square error of a run by the policy, over the target."""
    found = rmse(planned, levels, {number: reaches[number].of(alpha) for number in planned})
    return None if found is None else _times(found, 1 / target)


class _Reach:
    """How many standard errors the bounds of one level reach."""

    def __init__(self, level: LevelEntry) -> None:
        self._dof = max(BATCHES - 1, level.blocks * BATCHES - 1)

    def of(self, alpha: float) -> float:
        return quantile(alpha, self._dof)


class _Level:
    """The claims on one quantity on one level."""

    def __init__(
        self,
        policy: PolicyDocument,
        record: AuditRecord,
        plan: LevelPart,
        level: LevelEntry,
        *,
        name: str,
        reach: _Reach,
    ) -> None:
        self._policy, self._record, self._plan, self._level, self._name = policy, record, plan, level, name
        self._reach = reach
        self._measured = plan.measured[name]

    def _claim(
        self,
        check: Check,
        figure: str,
        limit: float,
        bounds: Callable[[float], Bounds | None],
        *,
        arm: str | None = None,
        at_least: bool = False,
        settled: bool = False,
    ) -> Claim:
        where = f"level {self._level.level}, {self._name}" + (f", {arm}" if arm else "")
        return Claim(
            check=check,
            level=self._level.level,
            quantity=self._name,
            arm=arm,
            figure=f"{where}: {figure}",
            limit=limit,
            at_least=at_least,
            paths=self._level.paths,
            bounds=bounds,
            settled=settled,
        )

    def telescoping(self) -> Iterator[Claim]:
        found = self._level.telescoping
        if found is None:
            return
        figure = "what the mean of its coarse paths is off that of the fine ones below, in standard errors past chance,"
        if found.difference is None or found.se is None:
            yield self._claim("levels", figure, 0.0, _unknown)
            return
        apart = abs(found.difference)
        size = apart / found.se if found.se else math.inf if apart else 0.0

        def bounds(alpha: float) -> Bounds:
            excess = max(0.0, size - self._reach.of(alpha))  # known to differ or not: more paths would decide nothing
            return Bounds(estimate=excess, low=excess, high=excess)

        yield self._claim("levels", figure, 0.0, bounds)

    def shares(self, *, counted: bool) -> Iterator[Claim]:
        """Yield the claims on lost additions and subnormals of each arm that the policy has counted."""
        seen = None if self._record.range is None else self._record.range.watched
        levels = [] if seen is None else seen.levels
        watched = next((one.arms for one in levels if one.level == self._level.level), {})
        for arm in (one for one in arms_of(self._plan) if one in self._measured.arms):
            part, entry = self._measured.arms[arm], watched.get(arm)
            for check, known, fresh in _SHARES:
                before = getattr(part, known)
                if not isinstance(before, SharePart) or (entry is None and not counted):
                    continue
                limit, figure = _TIMES_SHARE * before.high, f"its share of {check}, by its lower bound,"
                now = None if entry is None else getattr(entry, fresh)
                if now is None:
                    yield self._claim(check, figure, limit, _unknown, arm=arm)
                elif now.share is not None:  # or there is nothing of which it could be a share
                    found = Bounds(estimate=now.share, low=now.share_low, high=now.share_high)
                    # Above its limit for certain or not: what a few paths show of it is all that is asked.
                    yield self._claim(check, figure, limit, _constant(found), arm=arm, settled=True)

    def errors(self, arm: str) -> Iterator[Claim]:
        """Yield the claims on the variance and on the mean of the rounding error of one arm."""
        entry, known = self._level.arms[arm], self._measured.arms.get(arm)
        if known is None or known.error_variance is None:
            return
        if entry.error_variance is None:
            yield self._claim("error variance", "its error variance", 0.0, _unknown, arm=arm)
            return
        mine, was = self._carriers(arm), known.effective_size
        spread, before = self._spreads(entry, known, arm)
        if before.variance:
            few = any(one is not None and one < _FEW for one in (mine, was))
            most = before.bounds(quantile(1 - self._policy.evidence.confidence, _MANY)).high
            yield self._claim(
                "error variance",
                "its error variance over the policy's bound of it",
                _TIMES_FEW if few else _TIMES,
                lambda alpha: _times(spread.bounds(self._reach.of(alpha)), 1 / most),
                arm=arm,
            )
        elif spread.variance:  # the policy saw no path with an error: so much may still come as none of its paths shows
            yield self._claim(
                "error variance",
                "its error variance, where the policy saw none,",
                _TIMES_FEW * _NONE_SEEN * spread.size * self._level.paths / self._measured.paths,
                lambda alpha: spread.bounds(self._reach.of(alpha)),
                arm=arm,
            )
        if before.variance or not spread.variance:  # else the variance alone says how large an error may come
            yield from self._mean(entry, known, arm, before)

    def _carriers(self, arm: str) -> float | None:
        entry = self._level.corrections.get(f"{arm}:{REFERENCE}")
        return None if entry is None else entry.effective_size

    def _spreads(self, entry: ArmEntry, known: ArmPart, arm: str) -> tuple[Spread, Spread]:
        was = known.error_variance or 0.0
        # Its bounds lie at least this many standard errors of the logarithm away: it is not taken as surer than it was.
        reach = quantile(1 - self._policy.evidence.confidence, _MANY)
        se = math.log(known.error_variance_high / was) / reach * was if was and known.error_variance_high else 0.0
        before = Spread.of(was, se, known.effective_size, self._measured.paths)
        like = before.size * self._measured.paths
        carriers = self._carriers(arm)
        fresh = Spread.of(entry.error_variance or 0.0, entry.error_variance_se, carriers, self._level.paths, like)
        return fresh, before

    def _mean(self, entry: ArmEntry, known: ArmPart, arm: str, before: Spread) -> Iterator[Claim]:
        mean, se = entry.error_mean, entry.error_mean_se
        if known.error_mean_low is None or known.error_mean_high is None:
            return
        most = max(-known.error_mean_low, known.error_mean_high, _OF_SPREAD * math.sqrt(before.variance))
        figure = "the size of its mean error" + (" over the policy's bound of it" if most else ", where it had none,")

        def bounds(alpha: float) -> Bounds | None:
            if mean is None or se is None:
                return None
            half = self._reach.of(alpha) * se
            size = abs(mean)
            return _times(Bounds(estimate=size, low=max(0.0, size - half), high=size + half), 1 / (most or 1.0))

        yield self._claim("error mean", figure, _TIMES if most else 0.0, bounds, arm=arm)

    def bias(self) -> Iterator[Claim]:
        """Yield the claim on what the widest arm shifts the mean by."""
        top = arms_of(self._plan)[-1]
        budget = self._policy.target.bias_budget[self._name]
        if top == REFERENCE:
            return
        figure = "the shift of its mean by rounding, over its share of the target,"
        entry = self._level.corrections.get(f"{top}:{REFERENCE}")
        if entry is None or entry.mean is None or entry.mean_se is None or not budget:
            yield self._claim("bias", figure, 1.0, _unknown, arm=top)
            return
        size, se, few = abs(entry.mean), entry.mean_se, entry.counted and entry.events < 20
        counted = self._counted(top) if few else None

        def bounds(alpha: float) -> Bounds | None:
            if few and counted is None:
                return None
            half = self._reach.of(alpha) * se
            high = max(size + half, counted(alpha) if counted is not None else 0.0)
            return _times(Bounds(estimate=size, low=max(0.0, size - half), high=high), 1 / budget)

        yield self._claim("bias", figure, 1.0, bounds, arm=top)

    def _counted(self, top: str) -> Callable[[float], float] | None:
        """Return the bound of a bias that few paths carry: the record's, which grows as the logarithm of 1 / alpha."""
        ends = [
            max(-arm.bias_low, arm.bias_high)
            for arm in self._level.arms.values()
            if arm.scheme is not None
            and (arm.scheme.wide or arm.scheme.narrow) == top
            and arm.bias_low is not None
            and arm.bias_high is not None
        ]
        if not ends:
            return None
        alpha_of_record = (1 - confidence_of(self._record)) / looks_of(self._record)
        return lambda alpha: ends[0] * max(1.0, math.log(alpha) / math.log(alpha_of_record))

    def gains(self, costs: Costs, below: int) -> Iterator[Claim]:
        """Yield the claims on gain and edge of the level's scheme."""
        arm, today = arms_of(self._plan)[0], self._policy.today
        known = self._measured.arms.get(arm)
        if known is None or known.gain_low is None:  # the reference alone, or an arm that was not judged
            return

        def gains(alpha: float) -> Bounds | None:
            return gain(self._plan, self._level, below, today, costs=costs, reach=self._reach.of(alpha))

        yield self._claim("gain", "its gain", known.gain_low, gains, arm=arm, at_least=True)
        entry, own = self._level.arms[arm], gains(0.5)
        if known.edge_low is None:
            return
        of_record = self._reach.of((1 - confidence_of(self._record)) / looks_of(self._record))

        def edges(alpha: float) -> Bounds | None:
            if own is None or not (entry.gain and entry.edge and entry.edge_low):
                return None
            wider = self._reach.of(alpha) / of_record
            high_of_record = math.inf if entry.edge_high is None else entry.edge_high
            low, high = (
                entry.edge * math.exp(wider * math.log(bound / entry.edge))
                for bound in (entry.edge_low, high_of_record)
            )
            # Where the fresh audit weighs another scheme the edge is brought to the policy's by their gains.
            return _times(Bounds(estimate=entry.edge, low=low, high=high), own.estimate / entry.gain)

        yield self._claim("edge", "its edge", known.edge_low, edges, arm=arm, at_least=True)


def _unknown(alpha: float) -> Bounds | None:
    """Return no figure: what the policy claims and a fresh audit cannot say is undecided."""
    return None


def _constant(bounds: Bounds) -> Callable[[float], Bounds]:
    return lambda alpha: bounds


def _times(bounds: Bounds, by: float) -> Bounds:
    return Bounds(estimate=bounds.estimate * by, low=bounds.low * by, high=bounds.high * by)


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def beside(value: float, limit: float) -> str:
    """Return a number with so many digits that it does not round across its limit."""
    for digits in range(3, 18):
        text = f"{value:.{digits}g}"
        if (float(text) > limit) == (value > limit) and (float(text) < limit) == (value < limit):
            return text
    return repr(value)
