"""Sums in a format: published figures, NumPy's own sums, and what a model of both says of a plan."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import ndtri

from narrowgauge.arithmetic.formats import format_named
from narrowgauge.judge.averaging import SHARE, Terms, averaged, largest_count, sum_error

SINGLE, HALF, DOUBLE = map(format_named, ("float32", "float16", "float64"))


def evenly(size):
    """Uniforms in the middles of equal cells."""
    return (np.arange(size) + 0.5) / size


def calls(z):
    """Discounted payoffs of a call on geometric Brownian motion, S0 = K = 100, r = .05, s = .2, T = 1."""
    return math.exp(-0.05) * np.maximum(100.0 * np.exp(0.03 + 0.2 * z) - 100.0, 0.0)


CALLS = Terms(calls(ndtri(evenly(2**18))))


@pytest.mark.parametrize(("power", "published"), [(24, -7.36e-3), (26, -0.121)])
def test_a_running_float32_sum_of_call_payoffs_loses_what_was_published(power, published):
    """Within the 10% that the dS/dk integration is good for; the figures were simulated when the project began."""
    found = sum_error(CALLS, 2.0**power, SINGLE, "running")
    assert found.bias / (found.count * CALLS.mean) == pytest.approx(published, rel=0.1)


def test_the_standard_error_there_is_the_published_one():
    """3.4e-4 of the mean at 2^24 payoffs: the bias is 20 times that."""
    assert math.sqrt(CALLS.variance / 2**24) / CALLS.mean == pytest.approx(3.4e-4, abs=0.05e-4)


def test_half_of_the_ones_are_lost():
    """numpy float32 ones of shape (2^25, 2) summed over axis 0 give 16,777,216; the model says the same."""
    summed = np.ones((2**25, 2), np.float32).sum(axis=0)
    assert summed.tolist() == [16777216.0, 16777216.0]
    found = sum_error(Terms(np.ones(2)), 2.0**25, SINGLE, "running")
    assert (found.bias, found.variance) == (-(2.0**24), 0.0)
    assert sum_error(Terms(np.ones(2)), 2.0**24, SINGLE, "running").bias == 0.0


def test_while_ulps_are_small_the_error_is_the_published_walk():
    """0.2452 u sqrt(N), root mean square over the counts of one power of two, computed from first principles.

    The variances of rounding errors of 2^16 values are each known to sqrt(.8 / 2^16); 3.9 of these, halved by the root.
    """
    terms = Terms(0.5 + evenly(2**16) * math.pi / 3)
    counts = 2.0 ** (14 + evenly(64))
    errors = [sum_error(terms, count, SINGLE, "running") for count in counts]
    squares = [one.variance / (one.count * (one.count * terms.mean * SINGLE.unit_roundoff) ** 2) for one in errors]
    assert math.sqrt(np.mean(squares)) == pytest.approx(0.2452, rel=3.9 / 2 * math.sqrt(0.8 / 2**16))


RUNS = 2000
BOUND = 3.9 * math.sqrt(2 / RUNS)  # of a mean square of normal errors: 1 in 10,000 false alarms


def uniform_runs(kind, count, *, low=0.0):
    return np.random.default_rng(5).uniform(low, 1.0, (RUNS, count)).astype(kind)


def mean_square(summed, values):
    return float(np.mean((summed.astype(np.float64) - values.astype(np.float64).sum(axis=1)) ** 2))


def test_a_running_sum_errs_as_numpys_accumulation_does():
    """float16, 1,000 values: the sum is 500, with an ulp of a quarter to a half."""
    values = uniform_runs(np.float16, 1000)
    summed = np.add.accumulate(values, axis=1)[:, -1]
    found = sum_error(Terms(values.ravel()[: 2**16].astype(np.float64)), 1000.0, HALF, "running")
    assert mean_square(summed, values) == pytest.approx(found.variance + found.bias**2, rel=BOUND)


def test_a_pairwise_sum_errs_as_numpys_own_does():
    """float32, 2^14 contiguous values."""
    values = uniform_runs(np.float32, 2**14)
    summed = np.array([row.sum() for row in values])
    terms = Terms(values[:4].ravel().astype(np.float64))
    found = sum_error(terms, 2.0**14, SINGLE, "pairwise")
    assert mean_square(summed, values) == pytest.approx(found.variance + found.bias**2, rel=BOUND)
    running = sum_error(terms, 2.0**14, SINGLE, "running")
    assert running.variance > 50 * found.variance, "one after the other is another thing"


def test_a_sum_of_both_signs_is_as_large_as_its_root_mean_square():
    """float16 sums of 4,096 uniforms about 0 wander; between half and twice the mean square of NumPy's."""
    values = uniform_runs(np.float16, 4096, low=-1.0)
    summed = np.add.accumulate(values, axis=1)[:, -1]
    terms = Terms(values[:16].ravel().astype(np.float64), 0.0, 1 / 3)
    found = sum_error(terms, 4096.0, HALF, "running")
    assert 0.5 < (found.variance + found.bias**2) / mean_square(summed, values) < 2.0


def squares_of(values):
    return Terms(values), Terms(values * values)


def test_a_sum_past_the_range_has_no_figures():
    """100,000 payoffs of about 10 are a million; float16 ends at 65,504."""
    terms, squares = squares_of(calls(ndtri(evenly(1024))))
    assert averaged(terms, squares, 100_000, HALF, "pairwise") is None
    assert averaged(terms, squares, 100_000, SINGLE, "pairwise") is not None


def test_the_variance_suffers_with_the_squares():
    """2^24 payoffs and their squares, added up by NumPy's cumsum in float32, give the mean and variance that are said.

    Within 10%, as for the mean; chance moves either by a hundredth of that. In float64 nothing is lost.
    """
    count = 2**24
    values = calls(np.random.default_rng(8).normal(size=count))
    sums = [float(np.cumsum(one.astype(np.float32))[-1]) / count for one in (values, values * values)]
    terms, squares = squares_of(calls(ndtri(evenly(2**18))))
    found = averaged(terms, squares, count, SINGLE, "running")
    assert found.bias == pytest.approx(sums[0] - values.mean(), rel=0.1)
    assert found.variance_bias == pytest.approx((sums[1] - sums[0] ** 2) / values.var() - 1.0, rel=0.1)
    exact = averaged(terms, squares, count, DOUBLE, "running")
    assert exact.share < 1e-6
    assert abs(exact.variance_bias) + exact.variance_deviation < 1e-9


@pytest.mark.parametrize("order", ["running", "pairwise"])
@pytest.mark.parametrize("form", [HALF, SINGLE])
def test_the_largest_count_is_where_the_share_is_passed(form, order):
    """At that count the error is within a tenth of the standard error, a hundredth further on it is not."""
    terms = Terms(calls(ndtri(evenly(4096))))

    def within(count):
        found = sum_error(terms, count, form, order)
        error = math.sqrt((found.bias**2 + found.variance) / (count * terms.variance))
        return error <= SHARE and not found.overflows

    largest = largest_count(terms, form, order)
    assert within(float(largest))
    assert not within(largest * 1.01)


def test_any_number_of_values_may_be_summed_in_pairs_in_float64():
    """No answer below 2^53; one after the other there is one."""
    assert largest_count(CALLS, DOUBLE, "pairwise") is None
    assert largest_count(CALLS, DOUBLE, "running") > 2**40


def test_a_small_sample_does_not_take_its_own_chance_for_a_bias():
    """1,024 payoffs: at 2^20 the bias of float32 is below 1.5e-4 of the mean; by the sample itself it mostly is not.

    Ten fixed seeds; the mean of the rounding errors of one sample has a standard error of .29 ulp / 32, 8.7e-4 of it.
    """
    chances = []
    for seed in range(10):
        sample = calls(np.random.default_rng(seed).normal(size=1024))
        found = sum_error(Terms(sample, CALLS.mean), 2.0**20, SINGLE, "running")
        assert abs(found.bias) / (found.count * CALLS.mean) < 1.5e-4
        errors = np.rint(sample) - sample  # an ulp of 1, at half of that sum
        chances.append(abs(errors.mean()) / CALLS.mean)
    assert sum(chance > 1.5e-4 for chance in chances) >= 5
