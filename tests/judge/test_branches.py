"""What a mismatch comes to: distances in ulps, the interval of its bias and how often that is wrong, and the budget."""

from __future__ import annotations

import math

import numpy as np
import pytest
from judge_cases import audit
from scipy import stats

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.judge.branches import bias, differs, split_formats, ulps, within
from narrowgauge.judge.intervals import Interval, jackknife, means
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.moments import Series

ALPHA = 0.01


@pytest.mark.parametrize("name", ["float16", "float32"])
def test_neighbours_are_one_ulp_apart(name: str) -> None:
    """As NumPy's own neighbours and their spacing say, subnormal ones included."""
    kind = FORMATS[name].storage.type
    here = np.array([1.0, 1.5, 1024.0, 0.3, 6e-8, 3e-5], kind)
    there = np.nextafter(here, kind(np.inf))
    found = ulps(here.astype(np.float64), there.astype(np.float64), FORMATS[name])
    assert np.array_equal(found, np.ones(here.size))
    assert np.array_equal((there - here) / np.spacing(here), np.ones(here.size, kind))


def test_what_is_not_finite_is_infinitely_far() -> None:
    """Also where both are infinite with one sign each."""
    found = ulps(np.array([1.0, np.inf, np.nan]), np.array([np.inf, -np.inf, 1.0]), FORMATS["float16"])
    assert np.isinf(found).all()


def test_bits_are_compared_as_bits() -> None:
    """Zeros of two signs differ, NaN does not differ from NaN."""
    assert differs(np.array([0.0, np.nan, 1.0]), np.array([-0.0, -np.nan, 1.0])).tolist() == [True, False, False]


def mismatches(seed: int, share: float) -> tuple[np.ndarray, float]:
    """4,096 differences, of which a share is 1 or 2 ulps of float16 at 1, mostly upward; and their true mean."""
    draw = np.random.default_rng(seed)
    events = draw.random(4096) < share
    size = np.where(draw.random(4096) < 0.7, 1.0, -2.0) * 2.0**-10
    return np.where(events, size, 0.0), share * (0.7 - 0.6) * 2.0**-10


@pytest.mark.parametrize("share", [0.4, 0.05, 0.001])
def test_the_interval_misses_as_rarely_as_it_says(share: float) -> None:
    """Of 400 seeds at most as many miss as a rate of 1% gives with a chance of 1e-4: this test's false-alarm rate."""
    missed = 0
    for seed in range(400):
        values, true = mismatches(seed, share)
        found = bias(Series.of(values), int(np.count_nonzero(values)), 2.0**-9, ALPHA)
        missed += not found.low <= true <= found.high
    assert missed <= stats.binom.isf(1e-4, 400, ALPHA)


def test_without_the_binomial_bound_a_few_events_would_miss_often() -> None:
    """The negative control: the jackknife of four events knows nothing of the large ones that it did not see."""
    missed = 0
    for seed in range(400):
        draw = np.random.default_rng(seed)
        values = np.where(draw.random(4096) < 0.001, np.where(draw.random(4096) < 0.9, 1.0, -20.0), 0.0)
        if not np.count_nonzero(values):
            continue
        true = 0.001 * (0.9 - 2.0)
        found = jackknife(means(Series.of(values)), ALPHA)
        missed += not found.low <= true <= found.high
    assert missed > 4 * stats.binom.isf(1e-4, 400, ALPHA)


def test_nothing_is_known_where_a_mismatch_is_not_finite() -> None:
    """One infinite difference leaves no bound."""
    values = np.zeros(64)
    values[3] = math.inf
    found = bias(Series.of(values), 1, 0.0, ALPHA)
    assert (found.low, found.high) == (-math.inf, math.inf)


def interval(low: float, high: float) -> Interval:
    return Interval(estimate=(low + high) / 2, low=low, high=high, se=0.0)


def asked(**branches: object) -> AuditFile:
    return audit(finest=3, target={"rmse": 0.004, "bias_share": 0.25}, branches=branches)


def test_a_mismatch_is_within_budget_where_its_whole_interval_is() -> None:
    """A share is bias_share x rmse over four levels, 2.5e-4; it must hold for every quantity."""
    allowed = asked(allow="within budget")
    assert within(allowed, {"value": interval(-2.5e-4, 2.5e-4)})
    assert not within(allowed, {"value": interval(-2.5e-4, 2.6e-4)})
    assert not within(allowed, {"value": interval(0.0, 0.0), "other": interval(-3e-4, 0.0)})
    assert not within(allowed, {"value": interval(-math.inf, math.inf)})


def test_nothing_is_allowed_that_the_file_does_not_allow() -> None:
    """Neither without the key nor without the table."""
    assert not within(asked(), {"value": interval(0.0, 0.0)})
    assert not within(audit(), {"value": interval(0.0, 0.0)})


def test_formats_that_a_split_could_use() -> None:
    """Those with a wider one in formats.wide, also wide ones; none where no scheme is a split."""
    assert split_formats(audit()) == ("bfloat16", "float16", "float32")
    assert split_formats(audit(formats={"narrow": ["float16"], "wide": ["float64"]})) == ("float16",)
    assert split_formats(audit(formats={"narrow": ["float32"], "wide": ["float32"]})) == ()
    assert split_formats(audit(formats={"schemes": ["alone"]})) == ()
