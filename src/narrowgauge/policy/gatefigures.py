"""The figures that a gate compares, each with bounds at any confidence, from a record alone; no numpy.

Standard errors are those of the record. A variance that few paths carry is bounded by their number as well, through
the square root of a count, whose spread is a half whatever the count: "The transformation of Poisson, binomial and
negative-binomial data", Biometrika 35(3/4), 1948, doi 10.1093/biomet/35.3-4.246 (recalled from memory).
"""

from __future__ import annotations

import functools
import math
from collections.abc import Mapping
from dataclasses import dataclass
from statistics import NormalDist
from typing import Any

from narrowgauge.record.audit import AuditRecord, CorrectionEntry, LevelEntry
from narrowgauge.record.policy import CostPart, LevelPart

__all__ = [
    "REFERENCE",
    "Bounds",
    "Costs",
    "Spread",
    "arms_of",
    "confidence_of",
    "gain",
    "looks_of",
    "quantile",
    "rmse",
    "spread_of",
]

REFERENCE = "float64"
_MOST = 700.0  # exp of more is infinite


@dataclass(frozen=True, slots=True, kw_only=True)
class Bounds:
    """A figure between `low` and `high`."""

    estimate: float
    low: float
    high: float


@functools.cache
def quantile(alpha: float, dof: int) -> float:
    """Return how many standard errors a two-sided interval at 1 - alpha reaches: Student's t, `dof` from 31 on.

    Five terms of the expansion in 1 / dof, "Handbook of Mathematical Functions", NBS AMS 55, 1964, 26.7.5 (recalled
    from memory).
    """
    z = -NormalDist().inv_cdf(alpha / 2)
    terms = (
        z,
        (z**3 + z) / 4,
        (5 * z**5 + 16 * z**3 + 3 * z) / 96,
        (3 * z**7 + 19 * z**5 + 17 * z**3 - 15 * z) / 384,
        (79 * z**9 + 776 * z**7 + 1482 * z**5 - 1920 * z**3 - 945 * z) / 92160,
    )
    return float(sum(term / float(dof) ** power for power, term in enumerate(terms)))


@dataclass(frozen=True, slots=True, kw_only=True)
class Spread:
    """A variance with the standard error of its logarithm, and how many paths carry it (None: all of them).

    `size` is the square of what one such path adds to the sum of squares, over the number of paths: what a variance of
    0 is measured by.
    """

    variance: float
    se: float
    carriers: float | None
    size: float

    @classmethod
    def of(cls, variance: float, se: float | None, carriers: float | None, paths: int, like: float = 0.0) -> Spread:
        """Return the spread of a figure of a record; `like` is the square of one path's error where none is seen."""
        relative = 0.0 if not variance else math.inf if se is None else se / variance
        known = variance / carriers if variance and carriers else like / paths
        return cls(variance=variance, se=relative, carriers=carriers if variance else 0.0, size=known)

    def bounds(self, reach: float) -> Bounds:
        """Return the variance with bounds `reach` standard errors away; of two ways the wider."""
        if not self.variance:
            # None of N paths: exp(-N p) is not below the probability of `reach`.
            most = -math.log(max(2 * NormalDist().cdf(-reach), 1e-300))
            return Bounds(estimate=0.0, low=0.0, high=self.size * most)
        times = math.exp(min(reach * self.se, _MOST))
        low, high = self.variance / times, self.variance * times
        if self.carriers:
            half = reach / 2 / math.sqrt(self.carriers)
            low = min(low, self.variance * max(0.0, 1.0 - half) ** 2)
            high = max(high, self.variance * (math.sqrt(1.0 + 1.0 / self.carriers) + half) ** 2)
        return Bounds(estimate=self.variance, low=low, high=high)


def arms_of(level: LevelPart) -> tuple[str, ...]:
    """Return the names of the arms that a level of a policy runs, the narrow one first."""
    narrow = level.narrow if level.draws == "exact" else f"{level.narrow}/{level.draws}"
    return (narrow,) if level.wide is None else (narrow, level.wide)


class Costs:
    """The costs of a path, by the cost table of a policy."""

    def __init__(self, cost: CostPart, asked: Mapping[str, object]) -> None:
        kernel = asked.get("kernel")
        known = kernel if isinstance(kernel, dict) else {}
        self._cost, self._factors = cost, int(known.get("factors", 1))
        self._coupled = known.get("coupling", "sum") == "sum"

    def path(self, level: LevelEntry, below: int, *arms: str) -> float:
        """Return the cost of one path in these arms at once; `below` is the number of steps one level below."""
        steps = level.steps + (below if self._coupled else 0)
        cost = self._cost
        cheap = cost.draws if cost.approximate_draws is None else cost.approximate_draws
        draws = {"exact": cost.draws, "approximate": cheap}
        kinds = {"approximate" if arm.endswith("/approximate") else "exact" for arm in arms}
        each = sum(cost.steps[arm.partition("/")[0]] for arm in arms)
        return steps * each + level.steps * self._factors * sum(draws[kind] for kind in kinds) + cost.path


def gain(planned: LevelPart, level: LevelEntry, below: int, today: str, *, costs: Costs, reach: float) -> Bounds | None:
    """Return what a level costs today over what it costs by the policy's scheme, at equal variance.

    With S = sqrt(V C) summed over the branches and w the correction's share of S, log of the gain moves by
    w log V + (1 - w) log(V / V narrow) - w log Var R. Standard errors of the three are added, which bounds that of the
    sum whatever their correlations. D and R = D - D narrow give V narrow / V = 1 - 2 Cov(D, R) / V + Var R / V, and by
    Cauchy and Schwarz the variance of D R is at most sqrt(kurtosis of D, kurtosis of R) V Var R.
    """
    arms = arms_of(planned)
    narrow, reference = level.arms[arms[0]].level_variance, level.reference
    v = level.arms[today].level_variance if today in level.arms else None
    ratio, level_se = _ratio_se(level, arms[0], today), reference.level_variance_se
    if not narrow or not v or not reference.level_variance or ratio is None or level_se is None:
        return None
    low = math.sqrt(narrow * costs.path(level, below, arms[0]))
    share, correction = 0.0, Bounds(estimate=0.0, low=0.0, high=0.0)
    if planned.wide is not None:
        entry = level.corrections[f"{arms[0]}:{planned.wide}"]
        if entry.variance is None:
            return None
        root = costs.path(level, below, *arms)
        found = spread_of(entry, level.paths).bounds(reach)
        correction = Bounds(**{name: math.sqrt(getattr(found, name) * root) for name in ("estimate", "low", "high")})
        share = correction.estimate / (low + correction.estimate)
    spread = share * level_se / reference.level_variance + (1.0 - share) * ratio
    slack = math.exp(min(reach * spread, _MOST))
    cost = v * costs.path(level, below, today)
    at = {name: cost / (low + getattr(correction, name)) ** 2 for name in ("estimate", "low", "high")}
    return Bounds(estimate=at["estimate"], low=at["high"] / slack, high=at["low"] * slack)


def rmse(
    planned: Mapping[int, LevelPart], levels: Mapping[int, LevelEntry], reaches: Mapping[int, float]
) -> Bounds | None:
    """Return the root-mean-square error of a run with the planned paths: sampling of all branches, and bias.

    None where a figure that it rests on does not exist.
    """
    total, low, high = 0.0, 0.0, 0.0
    bias, reach_of_bias = 0.0, 0.0
    for number, plan in planned.items():
        level, reach, arms = levels[number], reaches[number], arms_of(plan)
        reference, variance = level.reference, level.arms[arms[0]].level_variance
        if variance is None or not reference.level_variance or reference.level_variance_se is None:
            return None
        relative = reference.level_variance_se / reference.level_variance
        parts = [(Spread(variance=variance, se=relative, carriers=None, size=0.0), plan.paths)]
        if plan.wide is not None:
            entry = level.corrections[f"{arms[0]}:{plan.wide}"]
            if entry.variance is None:
                return None
            parts.append((spread_of(entry, level.paths), plan.correction_paths or 1))
        for spread, paths in parts:
            found = spread.bounds(reach)
            total += found.estimate / paths
            low += ((found.estimate - found.low) / paths) ** 2
            high += ((found.high - found.estimate) / paths) ** 2
        if arms[-1] != REFERENCE:
            shift = level.corrections[f"{arms[-1]}:{REFERENCE}"]
            if shift.mean is None or shift.mean_se is None:
                return None
            bias -= shift.mean
            reach_of_bias = math.hypot(reach_of_bias, reach * shift.mean_se)
    least, most = max(0.0, abs(bias) - reach_of_bias), abs(bias) + reach_of_bias
    return Bounds(
        estimate=math.hypot(math.sqrt(total), bias),
        low=math.sqrt(max(0.0, total - math.sqrt(low)) + least**2),
        high=math.sqrt(total + math.sqrt(high) + most**2),
    )


def spread_of(entry: CorrectionEntry, paths: int) -> Spread:
    """Return the spread of a correction; its variance is there."""
    return Spread.of(entry.variance or 0.0, entry.variance_se, entry.effective_size, paths)


def looks_of(record: AuditRecord) -> int:
    """Return how many looks the record's audit could take, which share its confidence."""
    known = _sampling(record)
    return max(1, (int(known.get("most_paths", 1)) // max(1, int(known.get("paths", 1)))).bit_length())


def confidence_of(record: AuditRecord) -> float:
    """Return the confidence of the record's audit, which its looks share."""
    return float(_sampling(record).get("confidence", 0.99))


def _sampling(record: AuditRecord) -> dict[str, Any]:
    sampling = record.asked.get("sampling")
    return sampling if isinstance(sampling, dict) else {}


def _ratio_se(level: LevelEntry, narrow: str, today: str) -> float | None:
    """Return a bound of the standard error of log(V today / V narrow), None where there is none to be had.

    It is 0 where they are the same arm.
    """
    if narrow == today:
        return 0.0
    found, v, kurtosis = 0.0, level.reference.level_variance, level.reference.level_kurtosis
    for arm in (one for one in (narrow, today) if one != REFERENCE):
        entry = level.corrections.get(f"{arm}:{REFERENCE}")
        if entry is None or entry.variance is None or not v:
            return None
        if not entry.variance:
            continue
        if kurtosis is None or entry.kurtosis is None or entry.variance_se is None:
            return None
        tails = (kurtosis * entry.kurtosis) ** 0.25
        found += 2 * tails * math.sqrt(entry.variance / v / level.paths) + entry.variance_se / v
    return found
