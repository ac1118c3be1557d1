"""Mergeable moments: certified data, a reference library, brute force, and laws of merging.

Bounds come from the number of roundings: a sum of n terms is off by at most g(n) times the sum of their magnitudes,
g(n) = n u / (1 - n u), u = 2^-53 ("Accuracy and stability of numerical algorithms", SIAM, 2002, section 4.2, recalled
from memory).
"""

from __future__ import annotations

import functools
import itertools
import math
import operator
from collections.abc import Iterable, Sequence
from dataclasses import fields

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from scipy import stats

from narrowgauge.measure.moments import BATCHES, Moments, Series

Doubles = npt.NDArray[np.float64]
Mask = npt.NDArray[np.bool_]

U = 2.0**-53


def g(roundings: int) -> float:
    return roundings * U / (1 - roundings * U)


# --- NIST Statistical Reference Datasets, univariate summary statistics, NumAcc1 to NumAcc4: certified mean and
# standard deviation (https://www.itl.nist.gov/div898/strd/univ/homepage.html) ---


def alternating(first: float, low: float, high: float) -> Doubles:
    return np.array([first, *itertools.chain.from_iterable([(low, high)] * 500)])


CERTIFIED = {
    "NumAcc1": (np.array([10000001.0, 10000003.0, 10000002.0]), 10000002.0, 1.0),
    "NumAcc2": (alternating(1.2, 1.1, 1.3), 1.2, 0.1),
    "NumAcc3": (alternating(1000000.2, 1000000.1, 1000000.3), 1000000.2, 0.1),
    "NumAcc4": (alternating(10000000.2, 10000000.1, 10000000.3), 10000000.2, 0.1),
}
certified = pytest.mark.parametrize("name", list(CERTIFIED))


def allowed(values: Doubles, deviation: float, merges: int) -> tuple[float, float]:
    """How far mean and standard deviation may be off: the data are decimals and their float64 are not.

    Each value is represented to half an ulp of the largest, and each merge rounds a mean by as much again; values that
    are each displaced by d displace the mean by d and the standard deviation by d sqrt(n / (n - 1)) at most (triangle
    inequality). On top come the roundings of sum, square and root, relative to the result.
    """
    d = (1 + merges) * math.ulp(float(np.abs(values).max())) / 2
    n = values.size
    return d, d * math.sqrt(n / (n - 1)) + g(n + 4) * deviation


def assert_certified(name: str, found: Moments, merges: int) -> None:
    values, mean, deviation = CERTIFIED[name]
    mean_off, deviation_off = allowed(values, deviation, merges)
    assert found.total == values.size
    assert abs(found.average - mean) <= mean_off
    assert abs(math.sqrt(found.variance) - deviation) <= deviation_off


@certified
def test_certified_data_in_one_go(name: str) -> None:
    """One batch of all values gives the certified mean and standard deviation."""
    assert_certified(name, Moments.of(CERTIFIED[name][0], batches=1), 0)


@certified
def test_certified_data_batch_by_batch(name: str) -> None:
    """Every cut into equal batches gives them as well once the batches are merged."""
    values = CERTIFIED[name][0]
    for batches in (d for d in range(2, values.size + 1) if values.size % d == 0):
        assert_certified(name, Moments.of(values, batches=batches), math.ceil(math.log2(batches)))


def blocks(values: Doubles, sizes: Sequence[int]) -> list[Moments]:
    assert sum(sizes) == values.size
    return [Moments.of(part, batches=1) for part in np.split(values, np.cumsum(sizes)[:-1])]


@certified
def test_certified_data_block_by_block(name: str) -> None:
    """Blocks of very unequal sizes, merged from the left and from the right, give them too."""
    values = CERTIFIED[name][0]
    for sizes in ([1, 2], [2, 1]) if values.size == 3 else ([1, 2, 500, 3, 495], [998, 1, 1, 1], [1] * 11 + [990]):
        parts = blocks(values, sizes)
        assert_certified(name, functools.reduce(operator.add, parts), len(sizes) - 1)
        assert_certified(name, functools.reduce(lambda right, left: left + right, reversed(parts)), len(sizes) - 1)


@certified
def test_certified_data_with_paths_left_out(name: str) -> None:
    """Values that are left out by the mask do not count, whatever they are, in batches of unequal filling."""
    values = CERTIFIED[name][0]
    keep = np.zeros(BATCHES * 64, np.bool_)
    keep[np.random.default_rng(1).permutation(keep.size)[: values.size]] = True
    spread = np.full(keep.size, np.nan)
    spread[keep] = values
    assert_certified(name, Moments.of(spread, keep), math.ceil(math.log2(BATCHES)))


def test_a_one_pass_variance_fails_numacc4() -> None:
    """Negative control: mean of squares less square of mean misses NumAcc4 by far more than the bound, in float64."""
    values, _, deviation = CERTIFIED["NumAcc4"]
    one_pass = float((values**2).mean() - values.mean() ** 2) * values.size / (values.size - 1)
    off = math.inf if one_pass <= 0 else abs(math.sqrt(one_pass) - deviation)
    assert off > 1e5 * allowed(values, deviation, 0)[1]


# --- against a reference library and brute force ---


def assert_moments(found: Moments, values: Doubles, merges: int) -> None:
    """Every moment of one batch is scipy.stats' to the roundings of both sides.

    A k-th central sum has n terms of k + 1 roundings; a mean off by e shifts it by k e times the sum of powers k - 1.
    A merge computes each of its terms, which add up to at most 2^k times the sum of powers, in 16 roundings or fewer.
    """
    n = values.size
    offsets = np.abs(values - values.mean())
    mean_off = g(n + 2 + 4 * merges) * float(np.abs(values).mean())
    assert found.count.tolist() == [n]
    assert abs(float(found.mean[0]) - values.mean()) <= 2 * mean_off
    for order, sums in ((2, found.m2), (3, found.m3), (4, found.m4)):
        size = float((offsets**order).sum())
        off = 2 * g(n + order + 1) * size + g(16) * merges * 2**order * size
        off += 2 * order * mean_off * float((offsets ** (order - 1)).sum())
        assert abs(float(sums[0]) - n * float(stats.moment(values, order))) <= off


def skewed(seed: int, size: int, shift: float = 0.0) -> Doubles:
    return np.random.default_rng(seed).gamma(0.7, 2.0, size) + shift


@pytest.mark.parametrize("shift", [0.0, -3.0, 1000.0])
@pytest.mark.parametrize("batches", [1, 2, 3, 5, 31, 32, 33, 64])
def test_whole_is_the_moments_of_all_data(batches: int, shift: float) -> None:
    """Batches of any number merge to the moments of all values together."""
    values = skewed(batches, batches * 37, shift)
    assert_moments(Moments.of(values, batches=batches).whole(), values, math.ceil(math.log2(batches)))


@pytest.mark.parametrize("sizes", [(1, 1), (1, 1000), (1000, 1), (3, 500, 1, 64, 2), (7,) * 40])
def test_blocks_of_unequal_sizes_merge_to_all_data(sizes: tuple[int, ...]) -> None:
    """Moments of blocks of any size add up to the moments of all values together."""
    values = skewed(len(sizes), sum(sizes), 10.0)
    assert_moments(functools.reduce(operator.add, blocks(values, sizes)), values, len(sizes))


def test_blocks_add_batch_by_batch() -> None:
    """Two blocks of 32 batches add up batch with batch, not end to end."""
    first, second = skewed(1, 32 * 8), skewed(2, 32 * 24)
    both = Moments.of(first) + Moments.of(second)
    rows = np.hstack([first.reshape(32, -1), second.reshape(32, -1)])
    for batch, values in enumerate(rows):
        assert_moments(both._slice(slice(batch, batch + 1)), values, 1)
    assert both.total == first.size + second.size


@pytest.mark.parametrize("share", [0.9, 0.3, 0.02])
def test_left_out_paths_leave_the_moments_of_the_rest(share: float) -> None:
    """With a mask every batch has the moments of its kept values; some batches are empty at a share of 0.02."""
    rng = np.random.default_rng(7)
    values, keep = skewed(8, 32 * 40), rng.random(32 * 40) < share
    found = Moments.of(values, keep)
    rows = [row[mask] for row, mask in zip(values.reshape(32, -1), keep.reshape(32, -1), strict=True)]
    assert (min(row.size for row in rows) == 0) == (share == 0.02)
    for batch, kept in enumerate(rows):
        if kept.size:
            assert_moments(found._slice(slice(batch, batch + 1)), kept, 0)
    assert_moments(found.whole(), values[keep], 5)


def test_empty_batches_change_nothing() -> None:
    """Adding moments of no value, on either side, leaves every bit; without any value all figures are 0 or None."""
    nothing = Moments.of(np.full(32 * 4, np.nan), np.zeros(32 * 4, np.bool_))
    some = Moments.of(skewed(3, 32 * 4, -1e6))
    for merged in (nothing + some, some + nothing):
        assert all(np.array_equal(getattr(merged, f.name), getattr(some, f.name)) for f in fields(Moments))
    for empty in (nothing, nothing + nothing):
        assert (empty.total, empty.average, empty.variance, empty.kurtosis) == (0, 0.0, 0.0, None)
        assert empty.sums_about_zero() == (0.0, 0.0)
        assert all(np.array_equal(part, np.zeros(33)) for part in empty.leave_one_out())


def test_one_value_has_no_variance() -> None:
    """A single value is its own mean, with variance 0 and no kurtosis."""
    keep = np.zeros(32, np.bool_)
    keep[5] = True
    found = Moments.of(np.full(32, 0.1), keep)
    assert (found.total, found.average, found.variance, found.kurtosis) == (1, 0.1, 0.0, None)


@given(
    value=st.floats(-1e70, 1e70, allow_subnormal=False),
    mask=hnp.arrays(np.bool_, st.integers(1, 40).map(lambda each: 32 * each)),
)
def test_a_constant_has_exactly_no_variance(value: float, mask: Mask) -> None:
    """Equal values have a sum of squares of exactly 0, in every batch and merged, however many are left out.

    A verdict of "no variance" and a kurtosis that does not exist hang on this zero.
    """
    found = Moments.of(np.full(mask.size, value), mask)
    for part in (found, found.whole(), (found + found).whole()):
        assert not part.m2.any()
    assert found.average == (value if mask.any() else 0.0)
    assert found.kurtosis is None


@given(values=hnp.arrays(np.float64, st.just(64), elements=st.floats(-1e70, 1e70)))
def test_variance_is_never_negative(values: Doubles) -> None:
    """Rounding takes no sum of squares below zero."""
    found = Moments.of(values)
    assert (found.m2 >= 0).all()
    assert (found.leave_one_out()[2] >= 0).all()
    assert found.variance >= 0


def test_kurtosis_is_that_of_the_reference_library() -> None:
    """Kurtosis is n m4 / m2^2, scipy's without bias correction, to the roundings of n terms of each sum."""
    values = skewed(4, 32 * 100)
    kurtosis = Moments.of(values).kurtosis
    assert kurtosis is not None
    assert abs(kurtosis - float(stats.kurtosis(values, fisher=False))) <= 2 * 3 * g(values.size + 16 * 5) * kurtosis


@pytest.mark.parametrize("shift", [0.0, 5.0, -200.0])
@pytest.mark.parametrize("filled", [1.0, 0.5, 0.03])
def test_leave_one_out_by_brute_force(filled: float, shift: float) -> None:
    """First the whole, then count, mean and sum of squares of the other 31 batches, each computed anew.

    The sums without a batch come from a difference of sums of the whole: they are off by roundings of the whole.
    """
    keep = np.random.default_rng(5).random(32 * 16) < filled
    values = skewed(6, keep.size, shift)
    count, mean, m2 = Moments.of(values, keep).leave_one_out()
    owner = np.repeat(np.arange(32), 16)
    offsets = values[keep] - float(values[keep].mean())
    size = float((offsets**2).sum())
    mean_off = g(keep.size + 32) * float(np.abs(values).max())
    for left_out in range(-1, 32):
        rest = values[keep & (owner != left_out)]
        assert count[left_out + 1] == rest.size
        assert abs(mean[left_out + 1] - rest.mean()) <= 2 * mean_off
        off = g(keep.size + 32) * 4 * size + 4 * mean_off * math.sqrt(rest.size * size)
        assert abs(m2[left_out + 1] - rest.size * float(np.var(rest))) <= off


def test_leaving_out_all_that_is_there_leaves_nothing() -> None:
    """Where one batch holds all values, the figures without it have count 0 and sum of squares 0."""
    keep = np.zeros(32 * 8, np.bool_)
    keep[:8] = True
    count, _, m2 = Moments.of(skewed(9, keep.size, 100.0), keep).leave_one_out()
    assert count.tolist() == [8.0, 0.0, *[8.0] * 31]
    assert m2[1] == 0.0
    assert (m2[2:] == m2[0]).all()


def test_sums_about_zero_by_brute_force() -> None:
    """Sums of squares and fourth powers come from central moments, to the roundings of their terms."""
    for shift in (0.0, 3.0, -3.0):
        values = skewed(10, 32 * 50, shift)
        second, fourth = Moments.of(values).sums_about_zero()
        offsets, m = values - values.mean(), abs(values.mean())
        terms = sum(math.comb(4, k) * m ** (4 - k) * np.abs(offsets**k).sum() for k in range(5))
        assert abs(second - (values**2).sum()) <= 2 * g(values.size + 80) * (values**2).sum()
        assert abs(fourth - (values**4).sum()) <= 2 * g(values.size + 80) * terms


# --- Series ---


def series(values: Iterable[float], keep: Iterable[bool] | None = None) -> Series:
    """A series of 32 batches: the values first, zeros after them up to a multiple of 32."""
    given = np.array([*values], np.float64)
    filled = np.zeros(-(-given.size // 32) * 32)
    filled[: given.size] = given
    return Series.of(filled, None if keep is None else np.array([*keep], np.bool_))


def test_events_are_the_values_that_are_not_zero() -> None:
    """Events count nonzero values of either sign; largest and smallest are magnitudes of events; -0.0 is none."""
    found = series([0.0, -0.0, -3.0, 0.5, 2.0])
    assert (found.events, found.largest, found.smallest) == (3, 3.0, 0.5)
    none = series([0.0, -0.0])
    assert (none.events, none.largest, none.smallest) == (0, 0.0, 0.0)
    assert none.counted
    assert none.effective_size == 0.0


@pytest.mark.parametrize("place", [5, 40, 1000])
def test_up_to_five_values_are_counted(place: int) -> None:
    """Five distinct values are kept, zero among them, a sixth ends that; whether it comes early or late."""
    values = np.zeros(1024)
    values[:4] = [1.0, -1.0, 0.25, 7.0]
    assert Series.of(values).distinct == frozenset({0.0, 1.0, -1.0, 0.25, 7.0})
    values[place] = 8.0
    found = Series.of(values)
    assert found.distinct is None
    assert not found.counted


def test_distinct_values_are_joined_by_merging() -> None:
    """Merged series know the values of both, up to five; one that has lost count stays so."""
    two, three, more = series([1.0, 2.0]), series([3.0, 4.0]), series([5.0])
    assert (two + three).distinct == frozenset({0.0, 1.0, 2.0, 3.0, 4.0})
    assert (two + three + more).distinct is None
    assert (two + three + more + two).distinct is None
    assert (two + two).distinct == two.distinct


def test_what_an_arm_lost_is_counted_and_in_no_moment() -> None:
    """Infinite and NaN values are counted, unless the reference lost them too, and no figure contains them."""
    values = [1.0, math.inf, 2.0, -math.inf, math.nan, 5.0, *[0.0] * 26]
    keep = [True, True, False, True, False, True, *[True] * 26]
    found = series(values)
    assert (found.nonfinite, found.events, found.largest, found.moments.total) == (3, 3, 5.0, 29)
    assert found.moments.average == pytest.approx(8 / 29, rel=g(32))
    kept = series(values, keep)
    assert (kept.nonfinite, kept.events, kept.largest, kept.smallest) == (2, 2, 5.0, 1.0)
    assert (kept.moments.total, kept.distinct) == (28, frozenset({0.0, 1.0, 5.0}))


def test_a_series_without_a_finite_value() -> None:
    """An arm that lost every path has no moment and no event, and merges with one that has."""
    lost = series([math.nan] * 32)
    assert (lost.nonfinite, lost.moments.total, lost.events, lost.distinct) == (32, 0, 0, frozenset())
    both = lost + series([3.0])
    assert (both.nonfinite, both.events, both.largest, both.smallest) == (32, 1, 3.0, 3.0)
    assert both.moments.average == pytest.approx(3 / 32, rel=g(32))


def test_effective_size_by_brute_force() -> None:
    """(sum x^2)^2 / sum x^4: 1 for one event, k for k equal ones, N / 3 in law for N normal values.

    N = 2^16 normals: the estimate of the kurtosis 3 has standard error sqrt(96 / N) (normal theory, fourth moment
    about zero: variance of x^4 is 96); false alarm 5.7e-7 at five of these.
    """
    assert series([0.0, 0.0, -7.0]).effective_size == pytest.approx(1.0, rel=g(32 * 20))
    for k in (2, 31, 64, 1000):
        assert series([0.3] * k).effective_size == pytest.approx(k, rel=g((k + 32) * 20))
    normals = np.random.default_rng(12).standard_normal(2**16)
    size = Series.of(normals).effective_size
    exact = (normals**2).sum() ** 2 / (normals**4).sum()
    assert size == pytest.approx(exact, rel=3 * g(normals.size + 80))
    assert abs(normals.size / size - 3) < 5 * math.sqrt(96 / normals.size)


numbers = st.one_of(
    st.sampled_from([0.0, -0.0, 1.0, -1.0, 0.5, 3.0, math.inf, -math.inf, math.nan]),
    st.integers(-1024, 1024).map(float),
)
pieces = st.integers(1, 4).flatmap(
    lambda each: st.tuples(
        hnp.arrays(np.float64, 32 * each, elements=numbers, fill=st.just(0.0)),
        st.none() | hnp.arrays(np.bool_, 32 * each),
    )
)


@given(st.lists(pieces, min_size=3, max_size=3))
def test_merging_is_associative_and_is_that_of_all_paths(parts: list[tuple[Doubles, Mask | None]]) -> None:
    """Any order of brackets gives the same counts, values and magnitudes, and moments to the roundings of a merge.

    Magnitudes are at most 1,024: a sum of k-th powers is at most n 2048^k, each of two merges rounds its terms up to
    16 times, and each sum over a batch has at most n + k + 1 roundings.
    """
    a, b, c = (Series.of(values, keep) for values, keep in parts)
    left, right = (a + b) + c, a + (b + c)
    kept = np.concatenate([v if keep is None else v[keep] for v, keep in parts])
    finite = kept[np.isfinite(kept)]
    sizes = np.abs(finite[finite != 0])
    for found in (left, right):
        assert found.moments.total == finite.size
        assert found.nonfinite == kept.size - finite.size
        assert found.events == sizes.size
        assert found.largest == sizes.max(initial=0.0)
        assert found.smallest == (sizes.min() if sizes.size else 0.0)
        assert found.distinct == (frozenset(finite.tolist()) if np.unique(finite).size <= 5 else None)
    n = np.maximum(left.moments.count, 1.0)
    roundings = g(int(n.max()) + 5 + 2 * 16)
    assert np.array_equal(left.moments.count, right.moments.count)
    assert np.all(np.abs(left.moments.mean - right.moments.mean) <= 2 * roundings * 1024)
    for order in (2, 3, 4):
        one, other = (getattr(side.moments, f"m{order}") for side in (left, right))
        assert np.all(np.abs(one - other) <= 2 * roundings * n * 2048.0**order)
