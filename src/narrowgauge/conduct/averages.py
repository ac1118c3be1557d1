"""A small sample of level differences, and from it what summing the planned paths in each format does."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Literal

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import format_named
from narrowgauge.conduct.entries import finite
from narrowgauge.conduct.run import Outcome
from narrowgauge.judge.averaging import SHARE, Order, Terms, averaged, largest_count
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.tally import LevelTally
from narrowgauge.record.averaging import AveragedEntry, AveragingEntry, FormatSumsEntry, SumEntry
from narrowgauge.record.plan import PlanEntry

__all__ = ["averaging_entry"]

Doubles = npt.NDArray[np.float64]


def averaging_entry(
    file: AuditFile, outcome: Outcome, plans: Mapping[str, Sequence[PlanEntry]]
) -> AveragingEntry | None:
    """Return what summation does to the branches of each quantity's plan, or to the levels of one without.

    None where nothing was sampled.
    """
    if outcome.study is None:
        return None
    samples = outcome.study.samples
    formats = list(dict.fromkeys([*(Arm.named(name).format for name in file.arms), REFERENCE]))
    made = {
        name: [
            _averaged(outcome.tallies[level], samples.get(level, {}), name, formats, branch)
            for level, branch in _branches(sorted(outcome.tallies), plan)
        ]
        for name, plan in plans.items()
    }
    sizes = [values.size for level in samples.values() for arm in level.values() for values in arm.values()]
    return AveragingEntry(share=SHARE, paths=max(sizes, default=0), quantities=made)


_Branch = tuple[str, str | None, int | None]  # narrow arm, wide arm of a correction, paths


def _branches(levels: Sequence[int], plan: Sequence[PlanEntry]) -> list[tuple[int, _Branch]]:
    if not plan:
        return [(level, (REFERENCE, None, None)) for level in levels]
    found: list[tuple[int, _Branch]] = []
    for one in plan:
        found.append((one.level, (one.scheme.narrow, None, one.paths)))
        if one.correction_paths is not None:
            found.append((one.level, (one.scheme.narrow, one.scheme.wide, one.correction_paths)))
    return found


def _averaged(
    tally: LevelTally,
    sampled: Mapping[str, Mapping[str, Doubles]],
    name: str,
    formats: Sequence[str],
    branch: _Branch,
) -> AveragedEntry:
    narrow, wide, paths = branch
    series = tally.quantities[name]
    moments = (series.differences[narrow] if wide is None else series.corrections[narrow, wide]).moments
    sample = _sample(sampled, name, narrow, wide)
    mean, variance = (finite(one) if moments.total >= 2 else None for one in (moments.average, moments.variance))
    reason: Literal["no variance", "not sampled"] | None = None
    sums: dict[str, FormatSumsEntry] = {}
    if sample is None:
        reason = "not sampled"
    elif mean is None or not variance or not _varies(sample):
        reason = "no variance"
    else:
        terms, squares = Terms(sample, mean, variance), Terms(sample * sample, mean * mean + variance)
        sums = {
            one: FormatSumsEntry(
                running=_sum_entry(terms, squares, one, "running", paths),
                pairwise=_sum_entry(terms, squares, one, "pairwise", paths),
            )
            for one in formats
        }
    return AveragedEntry(
        level=tally.level,
        branch="low" if wide is None else "correction",
        narrow=narrow,
        wide=wide,
        paths=paths,
        mean=mean,
        standard_error=None if paths is None or variance is None else finite(math.sqrt(variance / paths)),
        formats=sums,
        reason=reason,
    )


def _sample(sampled: Mapping[str, Mapping[str, Doubles]], name: str, narrow: str, wide: str | None) -> Doubles | None:
    """Return the finite values of a branch that were sampled; None with fewer than two."""
    low, high = (sampled.get(arm or narrow, {}).get(name) for arm in (narrow, wide))
    if low is None or high is None:
        return None
    with np.errstate(all="ignore"):
        values = low if wide is None else high - low
        squares = values * values
    kept = values[np.isfinite(squares)]
    return kept if kept.size > 1 else None


def _varies(sample: Doubles) -> bool:
    """Whether the values vary, and their squares have a variance that float64 holds."""
    with np.errstate(all="ignore"):
        return bool(sample.var() > 0 and np.isfinite(np.var(sample * sample)))


def _sum_entry(terms: Terms, squares: Terms, form: str, order: Order, paths: int | None) -> SumEntry:
    found = None if paths is None else averaged(terms, squares, paths, format_named(form), order)
    return SumEntry(
        bias=None if found is None else finite(found.bias),
        deviation=None if found is None else finite(found.deviation),
        share=None if found is None else finite(found.share),
        variance_bias=None if found is None else finite(found.variance_bias),
        variance_deviation=None if found is None else finite(found.variance_deviation),
        largest=largest_count(terms, format_named(form), order),
        reason="no plan" if paths is None else "range" if found is None else None,
    )
