"""Headroom, shares with their intervals, and shifts, by numbers that follow from the formats' definitions."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from narrowgauge.arithmetic.formats import format_named
from narrowgauge.judge.range import centring_shift, exponent, headroom, share_by_path

HALF, BRAIN = map(format_named, ("float16", "bfloat16"))


def test_exponents_are_those_of_powers_of_two():
    """2^e <= x < 2^(e + 1), also beside a power of two and for a subnormal float64."""
    assert [exponent(x) for x in (1.0, 1.5, 2.0, math.nextafter(2.0, 0.0), 5e-324)] == [0, 0, 1, 0, -1074]


def test_headroom_is_counted_from_the_ends_of_the_normal_range():
    """float16 has normal numbers from 2^-14 to below 2^16."""
    assert headroom(HALF, 2.0**-14, 65504.0) == (0, 0)
    assert headroom(HALF, 1.0, 1.0) == (15, 14)
    assert headroom(HALF, 2.0**-20, 2.0**17) == (-2, -6)
    assert headroom(BRAIN, 2.0**-20, 2.0**17) == (110, 106)


def test_a_shift_centres_a_format_on_what_a_kernel_computes():
    """float16's exponents -14 to 15 lie about a half; magnitudes about 2^-13.5 want them 14 lower."""
    assert centring_shift(HALF, 2.0**-20, 2.0**-7) == -14
    assert centring_shift(HALF, 2.0**-14, 2.0**15) == 1, "the largest keeps a bit of headroom"
    assert centring_shift(HALF, 2.0**-60, 2.0**10) == -4, "what is too large is worse than what is too small"


def test_a_share_lies_in_its_interval_as_often_as_it_says():
    """Events of one path hang together: 256 paths, each with a share of its own about a tenth, 100 trials each.

    95% intervals, 400 samples: below 90.7% coverage is 3.9 standard errors off. Negative control: an interval that
    takes all 25,600 trials for independent holds the share less than three times in four.
    """
    rng = np.random.default_rng(11)
    inside = naive = 0
    for _ in range(400):
        counts = rng.binomial(100, rng.beta(2.0, 18.0, 256)).astype(float)
        found = share_by_path(counts, 100.0, 0.05)
        inside += found.low <= 0.1 <= found.high
        low, high = stats.binomtest(int(counts.sum()), 25600).proportion_ci(0.95, "wilson")
        naive += low <= 0.1 <= high
    assert inside >= 400 * (0.95 - 3.9 * math.sqrt(0.05 * 0.95 / 400))
    assert naive < 300


def test_few_paths_with_events_are_counted():
    """Three of 256 paths, a share of .5 each: exact binomial bounds at 99.5% each side, times .5 and at most 1."""
    counts = np.zeros(256)
    counts[[3, 70, 200]] = 50.0
    found = share_by_path(counts, 100.0, 0.01)
    exact = stats.binomtest(3, 256).proportion_ci(0.99, "exact")
    assert found.estimate == pytest.approx(1.5 / 256)
    assert found.low == pytest.approx(0.5 * exact.low)
    assert found.high == pytest.approx(exact.high)


def test_no_event_has_a_bound_and_no_trial_has_none():
    """None in 256 paths: at most ln(200) / 256 of all trials at 99.5%."""
    assert share_by_path(np.zeros(256), 10.0, 0.01) == (0.0, 0.0, pytest.approx(math.log(200) / 256))
    assert share_by_path(np.zeros(256), 0.0, 0.01) is None


def test_the_same_share_in_every_path_is_known_exactly():
    """A sum of ones loses the same additions in every path."""
    assert share_by_path(np.full(256, 2048.0), 4096.0, 0.01) == (0.5, 0.5, 0.5)
