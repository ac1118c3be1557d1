"""What fine and coarse paths see: the table row by row in every format, the edge of uniforms, and the laws.

The independent side of each row is NumPy's float16, float32 and float64 and ml_dtypes' bfloat16, whose additions and
products are native, and a rounding from float64 by scaling and `rint`.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
import pytest
from scipy.stats import chi2, kstest, norm

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.draws.coarsen import Draws, Takes, coarse_draws, fine_draws
from narrowgauge.draws.streams import Purpose, uniforms

Doubles = npt.NDArray[np.float64]

TAKES: tuple[Takes, ...] = ("increments", "normals", "uniforms")
STEP = 0.3  # no power of two: sqrt(h) z is rounded in float64, too
FALSE_ALARM = 1e-6

# TF32 has no type of its own to compare with.
every_format = pytest.mark.parametrize("name", [name for name in FORMATS if name != "tf32"])
every_refinement = pytest.mark.parametrize("m", [2, 3])


def sample(takes: Takes, m: int, *, seed: int = 1, groups: int = 4, factors: int = 2, paths: int = 2048) -> Draws:
    values = uniforms(seed, Purpose.TRIAL, m, 0, (groups * m, factors, paths))
    return Draws.of(takes, values, STEP, m)


def both(draws: Draws, name: str) -> tuple[Doubles, Doubles]:
    """Fine and coarse draws of one arm, as float64."""
    arithmetic = arithmetic_named(name)
    fine = fine_draws(draws, arithmetic)
    coarse = coarse_draws(draws, fine, arithmetic)
    form = FORMATS[name]
    assert fine.dtype == coarse.dtype == form.carrier
    assert coarse.shape == (fine.shape[0] // draws.refinement, *fine.shape[1:])
    return fine.astype(np.float64), coarse.astype(np.float64)


def rounded(values: Doubles, name: str) -> Doubles:
    """Values rounded to a format: scaled so that its last place is 1, `rint` (ties to even), scaled back.

    Exact in float64 but for the rounding itself, as powers of two scale exactly; no draw overflows.
    """
    form = FORMATS[name]
    exponent = np.maximum(np.frexp(values)[1] - form.precision, form.emin - form.precision + 1)
    return np.asarray(np.ldexp(np.rint(np.ldexp(values, -exponent)), exponent))


def inside(values: Doubles, name: str) -> Doubles:
    """Rounded uniforms, with 0 and 1 exchanged for their neighbours by the storage type's own `nextafter`."""
    storage = FORMATS[name].storage
    close = rounded(values, name)
    neighbours = [float(np.nextafter(storage.type(a), storage.type(b))) for a, b in ((0, 1), (1, 0))]
    return np.where(close == 0.0, neighbours[0], np.where(close == 1.0, neighbours[1], close))


def summed_natively(fine: Doubles, name: str, m: int) -> npt.NDArray[np.generic]:
    """Sums of M neighbours, in order of time, by the storage type's own addition."""
    stored = fine.astype(FORMATS[name].storage)
    assert np.array_equal(stored.astype(np.float64), fine)  # they are values of the format
    total = stored[0::m]
    for j in range(1, m):
        total = total + stored[j::m]
    return total


@every_refinement
@every_format
def test_increments(name: str, m: int) -> None:
    """Fine: sqrt(h) z in float64, rounded once; coarse: sums of M of these in the arm's arithmetic."""
    draws = sample("increments", m)
    fine, coarse = both(draws, name)
    z = norm.ppf(uniforms(1, Purpose.TRIAL, m, 0, draws.values.shape))
    assert np.array_equal(fine, rounded(STEP**0.5 * z, name))
    assert np.array_equal(coarse, summed_natively(fine, name, m).astype(np.float64))


@every_refinement
@every_format
def test_normals(name: str, m: int) -> None:
    """Fine: z rounded once; coarse: the same sums of rounded normals, times the rounded 1 / sqrt(M)."""
    draws = sample("normals", m)
    fine, coarse = both(draws, name)
    z = norm.ppf(uniforms(1, Purpose.TRIAL, m, 0, draws.values.shape))
    assert np.array_equal(fine, rounded(z, name))
    factor = rounded(np.array([1 / math.sqrt(m)]), name).astype(FORMATS[name].storage)
    total = summed_natively(fine, name, m)
    assert np.array_equal(coarse, (total * factor).astype(np.float64))


@every_refinement
@every_format
def test_uniforms(name: str, m: int) -> None:
    """Fine: u rounded once; coarse: Phi of the normed sum in float64, rounded once; both kept inside (0, 1)."""
    draws = sample("uniforms", m)
    fine, coarse = both(draws, name)
    u = uniforms(1, Purpose.TRIAL, m, 0, draws.values.shape)
    assert np.array_equal(fine, inside(u, name))
    total = norm.ppf(u[0::m])
    for j in range(1, m):
        total = total + norm.ppf(u[j::m])
    assert np.array_equal(coarse, inside(norm.cdf(total / math.sqrt(m)), name))


@every_format
def test_the_order_of_the_sum_is_that_of_time(name: str) -> None:
    """With three steps in a coarse one the sum from the other end gives other bits for some path.

    Each sum rounds twice, by at most u times two and three of the largest draw.
    """
    fine, coarse = both(sample("increments", 3), name)
    backwards = summed_natively(fine[::-1], name, 3).astype(np.float64)[::-1]
    assert not np.array_equal(coarse, backwards)
    u = FORMATS[name].unit_roundoff
    assert np.abs(coarse - backwards).max() <= 2 * (2 + 3) * u * (1 + u) * np.abs(fine).max()


@every_format
def test_uniforms_at_the_ends_stay_inside(name: str) -> None:
    """The extreme uniforms give the smallest and the largest value of the format inside (0, 1), on both paths.

    Two of the smallest uniforms give a coarse one below 2^-53, which is the format's smallest value only in float16.
    """
    ends = np.array([2.0**-53, 1.0 - 2.0**-53]).reshape(1, 1, 2).repeat(2, axis=0)
    fine, coarse = both(Draws.of("uniforms", ends, STEP, 2), name)
    form = FORMATS[name]
    low = max(2.0**-53, form.min_subnormal)
    assert np.array_equal(fine[:, 0], [[low, 1.0 - form.unit_roundoff]] * 2)
    assert 0.0 < coarse[0, 0, 0] <= low
    assert coarse[0, 0, 1] == 1.0 - form.unit_roundoff


def test_float16_would_turn_one_uniform_in_4096_into_one() -> None:
    """Rounding alone gives 1 for uniforms from 1 - 2^-12 on, the clipped draws never.

    Of 2^20 uniforms a number with mean 256 and standard deviation 16: five of these are exceeded in 5.7e-7 of seeds.
    """
    draws = Draws.of("uniforms", uniforms(9, Purpose.TRIAL, 0, 0, (2, 1, 2**19)), STEP, 2)
    plain = draws.values.astype(np.float16)
    assert abs(int((plain == 1.0).sum()) - 256) < 80
    fine, coarse = both(draws, "float16")
    assert fine.max() == coarse.max() == 1.0 - 2.0**-11
    assert min(fine.min(), coarse.min()) >= 2.0**-24


@pytest.mark.parametrize("takes", TAKES)
def test_the_float64_draws_are_not_written_to(takes: Takes) -> None:
    """An arm gets arrays of its own: clipping and kernels that write into them leave the block's draws alone."""
    draws = sample(takes, 2, groups=1)
    before = [values.copy() for values in (draws.values, draws.normals) if values is not None]
    assert len(before) == (2 if takes == "uniforms" else 1)
    arithmetic = arithmetic_named("float64")
    fine = fine_draws(draws, arithmetic)
    coarse = coarse_draws(draws, fine, arithmetic)
    assert not any(np.shares_memory(made, source) for made in (fine, coarse) for source in (*before, draws.values))
    assert not np.shares_memory(fine, coarse)
    fine[...] = 7.0
    coarse[...] = 7.0
    after = [values for values in (draws.values, draws.normals) if values is not None]
    assert all(map(np.array_equal, after, before))


@every_refinement
@pytest.mark.parametrize("takes", ["increments", "normals"])
def test_variance_of_the_coarse_draws(takes: Takes, m: int) -> None:
    """Coarse increments have variance M h and coarse normals 1, in float64.

    (N - 1) s^2 / variance is chi-square with N - 1 degrees of freedom; false alarm 1e-6. Negative control: every M-th
    fine draw instead of the sum (times 1 / sqrt(M) for normals).
    """
    fine, coarse = both(sample(takes, m, seed=2, groups=1, factors=1, paths=2**17), "float64")
    variance = m * STEP if takes == "increments" else 1.0
    low, high = (chi2.ppf(tail, coarse.size - 1) / (coarse.size - 1) for tail in (FALSE_ALARM / 2, 1 - FALSE_ALARM / 2))
    assert low < coarse.var(ddof=1) / variance < high
    lost = fine[::m] * (1.0 if takes == "increments" else 1 / math.sqrt(m))
    assert not low < lost.var(ddof=1) / variance < high


@every_refinement
def test_coarse_uniforms_are_uniform(m: int) -> None:
    """2^17 coarse uniforms pass the Kolmogorov-Smirnov test at a false-alarm rate of 1e-6.

    Negative controls: the mean of the M uniforms, and the sum of the normals divided by M in place of sqrt(M).
    """
    draws = sample("uniforms", m, seed=3, groups=1, factors=1, paths=2**17)
    _, coarse = both(draws, "float64")
    assert kstest(coarse.ravel(), "uniform").pvalue > FALSE_ALARM
    for wrong in (draws.values.mean(axis=0), norm.cdf(draws.normals.sum(axis=0) / m)):
        assert kstest(wrong.ravel(), "uniform").pvalue < FALSE_ALARM


@pytest.mark.parametrize("takes", TAKES)
def test_one_step_of_each_group_moves_its_own_coarse_step(takes: Takes) -> None:
    """A fine draw changes the coarse draw of its own group, factor and path, and no other."""
    values = uniforms(4, Purpose.TRIAL, 0, 0, (6, 2, 8))
    _, coarse = both(Draws.of(takes, values.copy(), STEP, 3), "float64")
    values[4, 1, 5] = 1.0 - values[4, 1, 5]
    _, moved = both(Draws.of(takes, values.copy(), STEP, 3), "float64")
    assert np.argwhere(coarse != moved).tolist() == [[1, 1, 5]]
