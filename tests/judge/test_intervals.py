"""Intervals against classical formulas, brute force and scipy's own intervals."""

from __future__ import annotations

import math

import numpy as np
import pytest
from judge_cases import EPS
from scipy import stats

from narrowgauge.judge.intervals import (
    Interval,
    binomial_lower,
    binomial_upper,
    combined,
    jackknife,
    means,
    variances,
)
from narrowgauge.measure.moments import BATCHES, Series

ALPHA = 0.01


def sample(seed, paths=BATCHES * 50, *, offset=3.0):
    return offset + np.random.default_rng(seed).gamma(2.0, size=paths)


def leave_one_out(values, figure, batches=BATCHES):
    """The figure of all values, then of what is left without each batch."""
    parts = np.split(values, batches)
    return np.array([figure(values), *(figure(np.delete(parts, k, axis=0).ravel()) for k in range(batches))])


def rounding(values, wanted):
    """What sums of so many terms can lose, relative to the spread of the leave-one-out figures."""
    return 4 * values.size * EPS * np.abs(values).max() ** 2 / wanted[1:].std()


def test_jackknife_of_a_mean_is_the_t_interval_between_batches():
    """Estimate, standard error and bounds are those of scipy's one-sample t interval of the 32 batch means."""
    values = sample(1)
    found = jackknife(means(Series.of(values)), ALPHA)
    batches = np.split(values, BATCHES)
    classical = stats.ttest_1samp([batch.mean() for batch in batches], 0.0)
    wanted = classical.confidence_interval(1 - ALPHA)
    near = rounding(values, leave_one_out(values, np.mean))
    assert found.estimate == pytest.approx(values.mean(), rel=values.size * EPS)
    assert found.se == pytest.approx(stats.sem([batch.mean() for batch in batches]), rel=near)
    assert (found.low, found.high) == pytest.approx((wanted.low, wanted.high), rel=near)
    assert found.half_width == pytest.approx((wanted.high - wanted.low) / 2, rel=near)


def test_jackknife_of_a_variance_is_brute_force_leave_one_out():
    """The replicates are np.var of what is left; its standard error sqrt((g - 1) / g sum (f_i - mean f)^2)."""
    values = sample(2)
    replicates = variances(Series.of(values))
    wanted = leave_one_out(values, lambda kept: kept.var(ddof=1))
    near = rounding(values, wanted)
    assert replicates == pytest.approx(wanted, rel=values.size * EPS)
    g = BATCHES
    se = math.sqrt((g - 1) / g * sum((f - wanted[1:].mean()) ** 2 for f in wanted[1:]))
    found = jackknife(replicates, ALPHA)
    assert (found.estimate, found.se) == pytest.approx((wanted[0], se), rel=near)
    reach = stats.t.ppf(1 - ALPHA / 2, g - 1) * se
    assert (found.low, found.high) == pytest.approx((wanted[0] - reach, wanted[0] + reach), rel=near)


def test_batches_of_unequal_size_are_left_out_whole():
    """Paths that are not kept, and merged blocks, make unequal batches; brute force over the kept ones agrees."""
    rng = np.random.default_rng(3)
    blocks = [sample(4, BATCHES * 20), sample(5, BATCHES * 30)]
    keeps = [rng.random(block.size) < 0.8 for block in blocks]
    series = Series.of(blocks[0], keeps[0]) + Series.of(blocks[1], keeps[1])
    parts = [
        np.concatenate([b[k] for b, k in zip(bs, ks, strict=True)])
        for bs, ks in zip(
            zip(*(np.split(b, BATCHES) for b in blocks), strict=True),
            zip(*(np.split(k, BATCHES) for k in keeps), strict=True),
            strict=True,
        )
    ]
    left = [np.concatenate(parts[:k] + parts[k + 1 :]) for k in range(BATCHES)]
    assert len({part.size for part in parts}) > 1
    near = sum(block.size for block in blocks) * EPS
    assert means(series)[1:] == pytest.approx([kept.mean() for kept in left], rel=near)
    assert variances(series)[1:] == pytest.approx([kept.var(ddof=1) for kept in left], rel=near)


def test_extra_joins_the_sum_of_squares():
    """With extra e the variances are (M2 + e) / (n - 1), over all batches and without each."""
    series = Series.of(sample(6))
    n = series.moments.total
    left = n - n // BATCHES
    added = variances(series, 5.0) - variances(series)
    assert added == pytest.approx([5.0 / (n - 1), *[5.0 / (left - 1)] * BATCHES], rel=n * n * EPS)


def test_32_batches_have_31_degrees_of_freedom():
    """At 95% the half-width is 2.040 standard errors, at 99% 2.744: tables of t for 31 (recalled from memory)."""
    replicates = np.random.default_rng(7).standard_normal(BATCHES + 1)
    for alpha, quantile in ((0.05, 2.040), (0.01, 2.744)):
        found = jackknife(replicates, alpha)
        assert found.half_width / found.se == pytest.approx(quantile, abs=5e-4)  # the tables' last digit


def test_two_levels_combine_as_in_welchs_interval():
    """A difference of two means with 32 and 8 batches has scipy's interval for unequal variances.

    Welch's interval takes its degrees of freedom from Satterthwaite's formula too.
    """
    rng = np.random.default_rng(8)
    one, other = rng.normal(5.0, 1.0, 32), rng.normal(2.0, 3.0, 8)
    whole = one.mean() - other.mean()
    levels = [
        np.array([whole, *(np.delete(one, k).mean() - other.mean() for k in range(32))]),
        np.array([whole, *(one.mean() - np.delete(other, k).mean() for k in range(8))]),
    ]
    found = combined(levels, whole, ALPHA)
    wanted = stats.ttest_ind(one, other, equal_var=False).confidence_interval(1 - ALPHA)
    near = 1024 * EPS  # 40 values; leaving one out shrinks deviations by up to 31
    assert (found.estimate, found.low, found.high) == pytest.approx((whole, wanted.low, wanted.high), rel=near)
    assert found.se == pytest.approx(math.hypot(stats.sem(one), stats.sem(other)), rel=near)


def test_satterthwaite_by_hand():
    """Figures 0, 2 and 0, 3, 6: variances 1/2 x 2 = 1 and 2/3 x 18 = 12, freedom 13^2 / (1/1 + 144/2) = 169/73."""
    found = combined([np.array([9.0, 0.0, 2.0]), np.array([9.0, 0.0, 3.0, 6.0])], 9.0, ALPHA)
    reach = stats.t.ppf(1 - ALPHA / 2, 169 / 73) * math.sqrt(13)
    assert found.se == pytest.approx(math.sqrt(13), rel=8 * EPS)
    assert (found.low, found.high) == pytest.approx((9 - reach, 9 + reach), rel=64 * EPS)


@pytest.mark.parametrize("bad", [math.inf, -math.inf, math.nan])
def test_a_replicate_that_does_not_exist_leaves_nothing_known(bad):
    """The estimate stays, bounds and standard error are infinite; so too for an estimate that does not exist."""
    replicates = np.array([1.0, 2.0, bad, 3.0])
    nothing = Interval(estimate=1.0, low=-math.inf, high=math.inf, se=math.inf)
    assert jackknife(replicates, ALPHA) == nothing
    assert combined([np.array([1.0, 2.0, 3.0]), replicates], 1.0, ALPHA) == nothing
    unknown = combined([np.array([1.0, 2.0, 3.0])], bad, ALPHA)
    assert (unknown.low, unknown.high, unknown.se) == (-math.inf, math.inf, math.inf)


def test_without_spread_the_interval_is_a_point():
    """Equal figures without each batch: standard error 0, both bounds the estimate."""
    assert jackknife(np.full(5, 2.0), ALPHA) == Interval(estimate=2.0, low=2.0, high=2.0, se=0.0)


def test_exponential_takes_the_bounds_along():
    """exp of estimate and bounds; se stays, as the relative one; what is known of a logarithm is never lost."""
    found = Interval(estimate=0.0, low=-1.0, high=2.0, se=0.5).exponential()
    assert found == Interval(estimate=1.0, low=math.exp(-1), high=math.exp(2), se=0.5)
    far = Interval(estimate=0.0, low=-math.inf, high=math.inf, se=math.inf).exponential()
    assert (far.low, far.high) == (0.0, math.inf)
    assert Interval(estimate=800.0, low=1.0, high=math.inf, se=1.0).exponential().estimate == math.inf


@pytest.mark.parametrize("alpha", [0.1, 0.005, 1e-5])
@pytest.mark.parametrize(("events", "trials"), [(1, 2), (1, 1024), (7, 64), (19, 2**20), (500, 1000), (64, 64)])
def test_binomial_bounds_are_scipys_exact_ones(events, trials, alpha):
    """Both bounds at 1 - alpha are those of scipy's exact two-sided interval at 1 - 2 alpha."""
    wanted = stats.binomtest(events, trials).proportion_ci(1 - 2 * alpha, method="exact")
    near = 2 * 2e-12  # scipy finds them by brentq, whose default xtol is 2e-12
    assert binomial_lower(events, trials, alpha) == pytest.approx(wanted.low, abs=near, rel=0)
    assert binomial_upper(events, trials, alpha) == pytest.approx(wanted.high, abs=near, rel=0)


def test_no_event_is_bounded_by_the_logarithm():
    """ln(1 / alpha) / N, 4.6 / N at 99%: above the exact 1 - alpha^(1/N) by at most a share ln(1 / alpha) / N."""
    for trials in (100, 1024, 2**20):
        bound = binomial_upper(0, trials, ALPHA)
        exact = -math.expm1(math.log(ALPHA) / trials)
        assert bound == math.log(1 / ALPHA) / trials
        assert round(bound * trials, 1) == 4.6
        assert 1 < bound / exact < 1 + bound
        assert binomial_lower(0, trials, ALPHA) == 0.0
    assert binomial_upper(0, 3, ALPHA) == binomial_upper(0, 0, ALPHA) == 1.0


@pytest.mark.parametrize("trials", [16, 40])
def test_binomial_bounds_miss_at_most_as_often_as_they_say(trials):
    """Summed over all counts, for 199 probabilities, a bound misses with at most probability alpha.

    Nothing is sampled. Negative control: bounds of one event more or less miss more often somewhere.
    """
    alpha = 0.05
    p = np.arange(1, 200) / 200
    chances = stats.binom.pmf(np.arange(trials + 1)[:, None], trials, p)

    def missing(bound, above, shift):
        bounds = np.array([bound(min(max(k + shift, 0), trials), trials, alpha) for k in range(trials + 1)])
        missed = bounds[:, None] > p if above else bounds[:, None] < p
        return (chances * missed).sum(axis=0).max()

    assert missing(binomial_upper, False, 0) <= alpha < missing(binomial_upper, False, -1)
    assert missing(binomial_lower, True, 0) <= alpha < missing(binomial_lower, True, 1)
