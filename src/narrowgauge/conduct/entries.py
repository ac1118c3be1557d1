"""Series, intervals and judgements as entries of the record: finite figures, or None."""

from __future__ import annotations

import math
from typing import Any

from narrowgauge.judge.accumulation import AccumulationFit
from narrowgauge.judge.gain import LevelView, Scheme, breakeven
from narrowgauge.judge.intervals import Interval, jackknife, means, variances
from narrowgauge.judge.schemes import ArmJudgement
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.moments import Series
from narrowgauge.measure.tally import LevelTally, Raised
from narrowgauge.record.audit import CorrectionEntry, LawEntry, RaisedEntry, ReferenceEntry, SchemeEntry

__all__ = [
    "correction_entry",
    "finite",
    "interval_fields",
    "judged_fields",
    "law_entry",
    "mean_of",
    "mean_se_of",
    "raised_entry",
    "reference_entry",
    "scheme_entry",
    "variance_of",
    "variance_se_of",
]


def reference_entry(tally: LevelTally, view: LevelView) -> ReferenceEntry:
    """Return the reference's figures of one level."""
    value, difference = view.tally.values[REFERENCE], view.tally.differences[REFERENCE]
    return ReferenceEntry(
        mean=mean_of(value),
        mean_se=mean_se_of(value),
        variance=variance_of(value),
        level_mean=mean_of(difference),
        level_mean_se=mean_se_of(difference),
        level_variance=variance_of(difference),
        level_variance_se=variance_se_of(difference),
        level_kurtosis=finite(difference.moments.kurtosis),
        nonfinite=tally.dropped,
    )


def correction_entry(view: LevelView, narrow: str, wide: str) -> CorrectionEntry:
    """Return the figures of one correction."""
    series = view.tally.corrections[narrow, wide]
    ratio = breakeven(
        view.tally.differences[narrow].moments.variance,
        view.tally.differences[wide].moments.variance,
        series.moments.variance,
    )
    return CorrectionEntry(
        mean=mean_of(series),
        mean_se=mean_se_of(series),
        variance=variance_of(series),
        variance_se=variance_se_of(series),
        kurtosis=finite(series.moments.kurtosis),
        effective_size=finite(series.effective_size),
        events=series.events,
        counted=series.counted,
        breakeven_cost_ratio=finite(ratio),
    )


def judged_fields(judged: ArmJudgement | None) -> dict[str, Any]:
    """Return the fields of an arm's entry that come from a judgement; all None for an arm that has none."""
    if judged is None:  # an arm that is only wide, or today's
        return {
            "scheme": None,
            **interval_fields("gain", None),
            **interval_fields("edge", None),
            **interval_fields("bias", None),
            "verdict": None,
            "reason": None,
            "paths_needed": None,
            "admitted_rmse": None,
        }
    return {
        "scheme": None if judged.scheme is None else scheme_entry(judged.scheme),
        **interval_fields("gain", judged.gain),
        **interval_fields("edge", judged.edge),
        **interval_fields("bias", judged.bias),
        "verdict": judged.verdict,
        "reason": judged.reason,
        "paths_needed": judged.paths_needed,
        "admitted_rmse": finite(judged.admitted_rmse),
    }


def interval_fields(name: str, interval: Interval | None) -> dict[str, Any]:
    """Return an interval as three fields; None where it, or a bound of it, does not exist."""
    if interval is None:
        return {name: None, f"{name}_low": None, f"{name}_high": None}
    return {
        name: finite(interval.estimate),
        f"{name}_low": finite(interval.low),
        f"{name}_high": finite(interval.high),
    }


def scheme_entry(scheme: Scheme) -> SchemeEntry:
    """Return a scheme as it is written down."""
    return SchemeEntry(kind=scheme.kind, narrow=scheme.narrow, wide=scheme.wide)


def raised_entry(raised: Raised | None) -> RaisedEntry | None:
    """Return what a kernel raised as it is written down."""
    if raised is None:
        return None
    return RaisedEntry(type=raised.kind, message=raised.message, file=raised.file, line=raised.line)


def law_entry(law: AccumulationFit) -> LawEntry:
    """Return a fitted law as it is written down."""
    figures: dict[str, Any] = {
        name: finite(getattr(law, name)) for name in LawEntry.__struct_fields__ if name not in ("levels", "reason")
    }
    return LawEntry(**figures, levels=list(law.levels), reason=law.reason)


def finite(value: float | None) -> float | None:
    """Return a figure as a float, or None where it does not exist."""
    return float(value) + 0.0 if value is not None and math.isfinite(value) else None  # no negative zero


def _enough(series: Series | None) -> bool:
    return series is not None and series.moments.total >= 2


def mean_of(series: Series | None) -> float | None:
    """Return the mean of a series with at least two values."""
    return finite(series.moments.average) if series is not None and _enough(series) else None


def mean_se_of(series: Series | None) -> float | None:
    """Return the jackknife standard error of a mean."""
    return finite(jackknife(means(series), 0.05).se) if series is not None and _enough(series) else None


def variance_of(series: Series | None) -> float | None:
    """Return the unbiased variance of a series with at least two values."""
    return finite(series.moments.variance) if series is not None and _enough(series) else None


def variance_se_of(series: Series | None) -> float | None:
    """Return the jackknife standard error of a variance."""
    return finite(jackknife(variances(series), 0.05).se) if series is not None and _enough(series) else None
