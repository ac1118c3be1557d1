"""The accumulation law: exact data, closed forms, NumPy's own float16 arithmetic, the cover of the intervals.

Statistical tests have a fixed seed, state their false-alarm rate, and hold a negative control.
"""

from __future__ import annotations

import math
from dataclasses import astuple, fields, replace
from functools import partial

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import binom, chi2, norm, t

from narrowgauge.judge.accumulation import (
    AccumulationFit,
    LawPoint,
    agreement,
    correction_at,
    fit,
    rules,
    sentence,
    signal_decay,
    usable,
)

EPS = np.finfo(np.float64).eps
U = 2.0**-11
BATCHES = 32
R, S = 0.05, 0.2  # geometric Brownian motion dS = R S dt + S S dW, S_0 = 1, T = 1
WORDS = {
    "floor": "rounding of inputs and final operations",
    "walk": "the walk of step roundings (delta^2/h)",
    "drift": "systematic rounding that differs from path to path (drift)",
}
PARTS = tuple(WORDS)


def point(level, variance, *, steps=None, se=0.0, mean=0.0, value=1.0):
    steps = 2**level if steps is None else steps
    return LawPoint(
        level=level, steps=steps, variance=variance, se=se, dof=BATCHES - 1.0, mean=mean, value_variance=value
    )


def law(coefficients, n, u=1.0):
    return u**2 * sum(c * float(n) ** power for power, c in enumerate(coefficients))


def ladder(coefficients, u, levels, refinement=2, coarsest=1):
    steps = {level: coarsest * refinement**level for level in levels}
    return [point(level, law(coefficients, n, u), steps=n) for level, n in steps.items()]


def from_batches(level, batches):
    """A point whose variance is the mean over equal batches, with the standard error of that mean."""
    return point(level, batches.mean(), se=batches.std(ddof=1) / math.sqrt(len(batches)))


def noisy(rng, coefficients, u, freedom):
    """Levels 1 to 8, batch variances as chi-square with `freedom`, the law itself wrong by 1% at random."""
    true = [law(coefficients, 2**level, u) * (1 + 0.01 * rng.standard_normal()) for level in range(1, 9)]
    return [from_batches(k, v * rng.chisquare(freedom, BATCHES) / freedom) for k, v in enumerate(true, 1)]


def figures(result, name):
    return getattr(result, f"{name}_low"), getattr(result, name), getattr(result, f"{name}_high")


def relative_design(points, u):
    """The three columns, each divided by the variances and by its norm, and the norms."""
    rows = np.array([[u**2 * float(p.steps) ** k / p.variance for k in range(3)] for p in points])
    norms = np.linalg.norm(rows, axis=0)
    return rows / norms, norms


@pytest.mark.parametrize("u", [2.0**-8, 2.0**-11, 2.0**-24, 2.0**-53])
@pytest.mark.parametrize(
    ("finest", "refinement", "coarsest"), [(4, 2, 1), (12, 2, 1), (10, 4, 1), (15, 2, 32), (8, 3, 12)]
)
@pytest.mark.parametrize(
    "coefficients", [(0.06, 0.23, 1e-4), (0.5, 2.0, 0.0), (0.0, 1.0, 1e-3), (3.0, 0.0, 0.0), (0.0, 0.0, 1e-6)]
)
def test_exact_data_give_back_the_coefficients(u, finest, refinement, coarsest, coefficients):
    """Variances that obey the law are fitted to the last bits, in every format and on every ladder.

    The bound: m eps cond^2 times the size of the scaled solution, squared for solvers by normal equations.
    """
    points = ladder(coefficients, u, range(1, finest + 1), refinement, coarsest)
    result = fit(points, u)
    design, norms = relative_design(points, u)
    errors = len(points) * EPS * np.linalg.cond(design) ** 2 * np.linalg.norm(coefficients * norms) / norms
    for name, true, error in zip(PARTS, coefficients, errors, strict=True):
        low, figure, high = figures(result, name)
        assert abs(figure - true) <= error
        assert low - error <= true <= high + error
    assert result.deviation <= 100 * np.max(design @ (errors * norms))
    assert result.fit_p > 1 - 1e-9  # the misfit of a level is (deviation / 1%)^2, below 1e-10
    assert (result.levels, result.reason) == (tuple(range(1, finest + 1)), None)


def test_slope_is_the_exponent_over_the_finer_half():
    """A walk has slope 1, a drift 2; of levels 1 to 8 it sees 5 to 8, of 1 to 7 also the middle one, 4."""
    for finest, first, exponent in ((8, 5, 1), (7, 4, 2)):
        points = [point(k, 2.0 ** (exponent * k)) for k in range(1, finest + 1)]
        result = fit([replace(p, variance=2.0) if p.level < first else p for p in points], 1.0)
        assert result.slope == pytest.approx(exponent, abs=64 * EPS)
        assert result.slope_low < exponent < result.slope_high
        bent = fit([replace(p, variance=2.0) if p.level <= first else p for p in points], 1.0)
        assert not bent.slope_low < exponent < bent.slope_high


def test_bounds_are_those_of_a_reference_library():
    """Half a width is the error of numpy.polyfit with known weights times a t value between two extremes.

    Degrees of freedom by Satterthwaite: 31 / share^2 if one level holds all of the variance, 8 times that if
    all hold the same; share = .03^2 / (.03^2 + .01^2) = .9 is the part that was sampled.
    """
    points = [replace(p, se=0.03 * p.variance) for p in ladder((3, 0.5, 0.01), 1.0, range(1, 9))]
    result = fit(points, 1.0, confidence=0.99)
    weights = [1 / math.hypot(p.se, 0.01 * p.variance) for p in points]
    steps, variances = [p.steps for p in points], [p.variance for p in points]
    _, covariance = np.polyfit(steps, variances, 2, w=weights, cov="unscaled")
    for name, error in zip(PARTS, np.sqrt(np.diag(covariance))[::-1], strict=True):
        _, figure, high = figures(result, name)
        assert t.ppf(0.995, 8 * 31 / 0.9**2) < (high - figure) / error < t.ppf(0.995, 31 / 0.9**2)


def test_a_falling_variance_is_a_floor_at_its_mean():
    """Only a floor fits; weights being equal it is the plain mean, and 7 levels are left for the test."""
    sizes = np.linspace(1.03, 0.97, 8)
    result = fit([point(level, size) for level, size in enumerate(sizes, 1)], 1.0)
    assert (result.floor, result.walk, result.drift) == (pytest.approx(1.0, rel=64 * EPS), 0, 0)
    assert result.fit_p == pytest.approx(chi2.sf(np.sum((sizes - 1) ** 2) / 0.01**2, 7), rel=1024 * EPS)


def test_no_part_is_ever_negative_and_bounds_hold_the_figure():
    """0 <= low <= figure <= high, and the deviation is the worst |fit / measured - 1|, whatever the data."""
    rng = np.random.default_rng(11)
    for exponent in np.repeat((-1.0, -0.3, 0.0, 0.5, 1.5, 3.0), 20):
        sizes = {k: float(2.0 ** (exponent * k) * rng.lognormal(0, 0.3)) for k in range(1, 9)}
        result = fit([point(level, size, se=0.05 * size) for level, size in sizes.items()], 1.0)
        for name in PARTS:
            low, figure, high = figures(result, name)
            assert 0.0 <= low <= figure <= high
        assert min(result.floor_without_drift, result.walk_without_drift) >= 0.0
        whole = [law((result.floor, result.walk, result.drift), 2**k) / size for k, size in sizes.items()]
        assert result.deviation == pytest.approx(100 * max(abs(one - 1) for one in whole), rel=1024 * EPS)


def test_neither_scale_nor_order_of_the_variances_matters():
    """Variances times 2^-40 give coefficients times 2^-40, all else the same; any order gives equal bits."""
    points = noisy(np.random.default_rng(12), (0.06, 0.23, 1e-4), U, 60)
    scaled = [replace(p, variance=p.variance * 2.0**-40, se=p.se * 2.0**-40) for p in points]
    one, other = fit(points, U), fit(scaled, U)
    assert fit(points[::-1], U) == fit(points[4:] + points[:4], U) == one
    for field in fields(AccumulationFit):
        a, b = getattr(one, field.name), getattr(other, field.name)
        if field.name.startswith("slope"):
            assert b == pytest.approx(a, abs=1024 * EPS)  # logarithms of up to 30 cancel
        else:
            assert b == (a * 2.0**-40 if field.name.startswith(PARTS) or field.name.endswith("_drift") else a)


def test_level_0_is_left_out_when_five_others_are_there():
    """Six levels: 0 is not used. Five levels: it is. For a correction never."""
    assert fit(ladder((1, 1, 0), 1.0, range(6)), 1.0).levels == (1, 2, 3, 4, 5)
    assert fit(ladder((1, 1, 0), 1.0, range(5)), 1.0).levels == (0, 1, 2, 3, 4)
    assert fit(ladder((1, 1, 0), 1.0, range(5)), 1.0, leave_out_coarsest=True).levels == (1, 2, 3, 4)


@pytest.mark.parametrize(
    ("points", "leave_out"),
    [
        ([], False),
        (ladder((1, 1, 0), 1.0, range(1, 4)), False),
        (ladder((1, 1, 0), 1.0, range(4)), True),
        (ladder((0, 0, 0), 1.0, range(1, 9)), False),
        ([*ladder((1, 1, 0), 1.0, range(1, 4)), point(4, 0.0), point(5, math.inf)], False),
        ([point(level, 1.0, steps=max(2, level)) for level in range(1, 5)], False),
    ],
)
def test_fewer_than_four_usable_levels_are_not_fitted(points, leave_out):
    """Without 4 levels of different steps and some variance there are no figures, and a reason."""
    result = fit(points, U, leave_out_coarsest=leave_out)
    assert result == AccumulationFit(reason="too few usable levels")
    assert set(astuple(result)) == {None, (), "too few usable levels"}


def test_usable_levels_have_a_small_and_centred_error():
    """Var E up to .1 Var P and |mean E| up to .5 sd E pass, limits included; no variance and NaN do not."""
    good = point(3, 0.25, mean=-0.25, value=2.5)
    small, biased = replace(good, level=2, value_variance=2.499), replace(good, level=1, mean=0.2501)
    none, unknown = replace(good, level=4, variance=0.0, mean=0.0), replace(good, level=5, se=math.nan)
    limit = replace(good, level=0, mean=0.25)
    assert usable([good, small, biased, none, unknown, limit]) == [limit, good]


@pytest.mark.parametrize("coarsest", [1, 16])
def test_fixed_point_euler_gives_the_walk_of_its_closed_form(coarsest):
    """With one uniform rounding a step and one of the result, walk -> d^2/12 (e^a - 1)/a, a = (2r + s^2) T.

    Closed form: Var = (d^2/12) (1 + (G^n - 1)/(G - 1)), G = (1 + r h)^2 + s^2 h, since each error is carried
    on by independent factors whose second moment is G, and a uniform error has variance d^2/12 (textbook).
    The bound: least squares fit no worse than the limit law itself, whose relative remainder is known;
    weights of fitted instead of measured variances differ by at most the deviation, below 1%.
    """
    step, a = 2 * U, 2 * R + S**2
    floor = 1 + (math.exp(a) * (R**2 - a**2 / 2) - R**2 * math.expm1(a) / a) / a
    limit = step**2 / 12 / U**2 * np.array([floor, math.expm1(a) / a, 0.0])
    n = coarsest * 2 ** np.arange(1, 10)
    growth = (1 + R / n) ** 2 + S**2 / n
    sizes = step**2 / 12 * (1 + (growth**n - 1) / (growth - 1))
    points = [point(level, size, steps=k) for level, k, size in zip(range(1, 10), n, sizes, strict=True)]
    result = fit(points, U)
    design, norms = relative_design(points, U)
    remainder = np.linalg.norm(design @ (limit * norms) - 1)
    bound = 2 * 1.02 * remainder / np.linalg.svd(design, compute_uv=False)[-1] / norms
    assert result.deviation < 1
    assert np.all(np.abs(np.array([result.floor, result.walk, result.drift]) - limit) <= bound)
    assert bound[1] < 0.02 * limit[1]  # sharp: a uniform error of another width would not pass


def c_of_the_walk():
    """(1/12) int_0^T E[(ulp(S_t)/u)^2] e^((2r + s^2)(T - t)) dt, by quadrature over a lognormal's binades."""
    k = np.arange(-40, 41)

    def integrand(t):
        below = norm.cdf((k * math.log(2) - (R - S**2 / 2) * t) / (S * math.sqrt(t)))
        return float(np.sum(4.0 ** (k[:-1] + 1) * np.diff(below))) * math.exp((2 * R + S**2) * (1 - t))

    # t = x^2 takes the singularity out of the derivative at 0.
    return quad(lambda x: integrand(x * x) * 2 * x, 0, 1, epsabs=1e-11)[0] / 12


def euler(increments, dtype):
    h, state = dtype(1 / len(increments)), np.ones(increments.shape[1], dtype)
    for dw in increments:
        state = state + (dtype(R) * h * state + dtype(S) * state * dw)
    assert state.dtype == dtype
    return state.astype(np.float64)


def test_float16_time_stepping_has_the_walk_of_the_delta_squared_over_h_law():
    """The walk of NumPy's own float16 is c = 0.2342088, that of the correction, with its coarse half, 1.5 c.

    c: quadrature of the law's integral, the same to all digits as a value worked out apart. 2^14 paths in
    32 batches, false alarms 1e-4 for each of two intervals. Negative control: neither holds a value 10% off.
    """
    c = c_of_the_walk()
    assert c == pytest.approx(0.2342088, abs=5e-8)
    rng = np.random.default_rng(21)
    errors, corrections = [], []
    for level in range(1, 8):
        exact = rng.standard_normal((2**level, 2**14)) * 2 ** (-level / 2)
        given = exact.astype(np.float16)
        fine = euler(given, np.float16) - euler(exact, np.float64)
        coarse = euler(given[::2] + given[1::2], np.float16) - euler(exact[::2] + exact[1::2], np.float64)
        for sample, points in ((fine, errors), (fine - coarse, corrections)):
            points.append(from_batches(level, sample.reshape(BATCHES, -1).var(axis=1, ddof=1)))
    for points, walk, correction in ((errors, c, False), (corrections, 1.5 * c, True)):
        result = fit(points, U, leave_out_coarsest=correction, confidence=1 - 1e-4)
        assert result.walk_low <= walk <= result.walk_high
        assert not result.walk_low <= 0.9 * walk <= result.walk_high
        assert not result.walk_low <= 1.1 * walk <= result.walk_high
        assert result.fit_p > 1e-4


@pytest.mark.parametrize(
    ("coefficients", "freedom", "u"), [((3.0, 0.23, 1e-3), 1023, U), ((0.06, 0.23, 0.0), 60, 2.0**-24)]
)
def test_intervals_cover_as_often_as_they_say(coefficients, freedom, u):
    """Of 2,000 fits at most so many 99% intervals miss as a binomial count of 1% exceeds in 1e-4 of seeds.

    Negative control: intervals of half the width miss more often than that. The chi-square test is held to
    the same count at 1%, and finds the law n^1.5, which is none of the three parts, in most fits.
    """
    rng = np.random.default_rng(31)
    results = [fit(noisy(rng, coefficients, u, freedom), u) for _ in range(2000)]
    allowed = binom.ppf(1 - 1e-4, len(results), 0.01)
    for name, true in zip(PARTS, coefficients, strict=True):
        ends = [figures(result, name) for result in results]
        assert sum(not low <= true <= high for low, _, high in ends) <= allowed
        if true > 0:
            assert sum(not (low + v) / 2 <= true <= (v + high) / 2 for low, v, high in ends) > allowed
    assert sum(result.fit_p < 0.01 for result in results) <= allowed
    straight = [noisy(rng, (0, 1, 0), u, freedom) for _ in range(100)]
    bent = [[replace(p, variance=p.variance * (f := p.steps**0.5), se=p.se * f) for p in q] for q in straight]
    assert sum(fit(points, u).fit_p < 0.01 for points in bent) > 50


def test_the_part_that_rules_is_the_largest():
    """8 + n + n^2 / 64: up to 8 steps, up to 64, beyond; a drift whose lower bound is 0 never rules."""
    result = fit(ladder((8, 1, 1 / 64), 1.0, range(1, 13)), 1.0)
    assert [rules(result, n) for n in (1, 7, 9, 63, 65, 2**20)] == [part for part in PARTS for _ in range(2)]
    assert rules(replace(result, floor=8.0, walk=1.0), 8) == "floor"
    assert rules(replace(result, drift_low=0.0), 2**20) == "walk"


@pytest.mark.parametrize(
    ("coefficients", "said"),
    [
        ((6, 1, 0), "{floor} rules on levels 1-2, {walk} from level 3 on"),
        ((3, 1, 0), "{floor} rules on level 1, {walk} from level 2 on"),
        ((0, 1, 0), "{walk} rules on every level"),
        ((9, 0, 1), "{floor} rules on level 1, {drift} from level 2 on"),
        ((3, 1, 0.03), "{floor} rules on level 1, {walk} on levels 2-5, {drift} from level 6 on"),
    ],
)
def test_sentence_names_the_ruling_parts_and_their_levels(coefficients, said):
    """One sentence, the parts in order of the level from which they rule."""
    result = fit(ladder(coefficients, U, range(1, 9)), U)
    assert sentence(result, "a16", [(k, 2**k) for k in range(8, 0, -1)]) == f"a16: {said.format(**WORDS)}."


def test_without_a_fit_nothing_is_said_to_rule():
    """An unfitted law gives its reason, and asking it for a figure is refused with that reason."""
    nothing = AccumulationFit(reason="too few usable levels")
    assert sentence(nothing, "float32", [(0, 1)]) == "float32: the law is not fitted, too few usable levels."
    message = "^the law is not fitted: too few usable levels; accepted: a fit without a reason$"
    for ask in (rules, partial(correction_at, u=1.0, with_drift_high=False)):
        with pytest.raises(ValueError, match=message):
            ask(nothing, 8)
    message = r"^sentence: the ladder is empty; accepted: at least one \(level, steps\)$"
    with pytest.raises(ValueError, match=message):
        sentence(nothing, "float32", [])


def test_walks_agree_up_to_5_per_cent():
    """The spread is largest / smallest - 1; without two walks, or all of them 0, nothing is compared."""

    def said(**walks):
        return tuple(agreement({arm: AccumulationFit(walk=walk) for arm, walk in walks.items()}).values())

    assert said(float16=1.0, bfloat16=1.03125, float32=None) == (True, 0.03125, "float16", "bfloat16", None)
    assert said(float16=1.0, bfloat16=0.8, float32=0.9) == (False, 0.25, "bfloat16", "float16", None)
    assert said(float16=0.0, float32=0.2) == (False, None, "float16", "float32", "walk is 0 in float16")
    assert said(float16=0.0, float32=0.0) == (None, None, None, None, "walk is 0 in every arm")
    assert said(float16=1.0, float32=None) == (None, None, None, None, "fewer than two arms were fitted")


def test_correction_beyond_the_ladder_is_the_law():
    """A significant drift counts, another only if its upper bound is asked for; the variance is plain."""
    n, true = 2**16, (0.06, 0.35, 1e-3)
    result = fit(ladder(true, U, range(9)), U, leave_out_coarsest=True)
    fitted, high = (result.floor, result.walk, result.drift), result.drift_high
    assert correction_at(result, n, U, with_drift_high=False) == law(fitted, n, U)
    assert correction_at(result, n, U, with_drift_high=True) == law((*fitted[:2], high), n, U)
    doubtful, two = replace(result, drift_low=0.0), (result.floor_without_drift, result.walk_without_drift)
    assert correction_at(doubtful, n, U, with_drift_high=False) == law(two, n, U)
    assert correction_at(doubtful, n, U, with_drift_high=True) == law((*two, high), n, U)


def euler_level_variance(level):
    """Var of S_fine - S_coarse of geometric Brownian motion by Euler, from the exact moments of one step."""
    h, k = 2.0**-level, 2 ** (level - 1)
    both = (1 + R * h) ** 2 * (1 + 2 * R * h) + 2 * (1 + R * h) * S**2 * h
    fine, coarse = (1 + R * h) ** 2 + S**2 * h, (1 + 2 * R * h) ** 2 + 2 * S**2 * h
    mean = (1 + R * h) ** (2 * k) - (1 + 2 * R * h) ** k
    return fine ** (2 * k) - 2 * both**k + coarse**k - mean**2


def test_signal_decay_of_euler_paths_is_that_of_the_closed_form():
    """V_l of Euler decays like h (Acta Numerica 24, 2015, table 5.2), as does the line of levels 5 to 8.

    Its slope lies between the local slopes of the closed form, so they bound the error at level 12. The
    variances of levels 1, 4 and 8 were worked out apart: 4.25e-4, 5.69681014407e-5, 3.59247973021e-6.
    """
    exact = {level: euler_level_variance(level) for level in range(1, 13)}
    for level, value, digits in ((1, 4.25e-4, 3), (4, 5.69681014407e-5, 12), (8, 3.59247973021e-6, 9)):
        assert exact[level] == pytest.approx(value, rel=5 * 10.0**-digits)
    decay = signal_decay(range(9), [1.0, *(exact[level] for level in range(1, 9))], [0.0] * 9)
    slopes = [math.log2(exact[level] / exact[level + 1]) for level in range(5, 12)]
    assert min(slopes) <= decay.beta <= max(slopes)
    assert abs(math.log2(decay.at(12) / exact[12])) <= 7 * (max(slopes) - min(slopes)) < 0.1
    assert decay.log2_se(12) == 0.0


def test_signal_decay_is_the_weighted_line_of_a_reference_library():
    """Line, covariance and standard error are those of numpy.polyfit with known weights, to cond^2 eps."""
    levels, relative = np.arange(3, 9), np.array([1, 1, 0.004, 0.008, 0.016, 0.02])
    variances = 2.0 ** (-3 - 1.5 * levels) * np.exp(relative * np.random.default_rng(41).standard_normal(6))
    decay = signal_decay(levels, variances, relative * variances)
    weights = math.log(2) / relative[2:]
    line, covariance = np.polyfit(levels[2:], np.log2(variances[2:]), 1, w=weights, cov="unscaled")
    near = np.linalg.cond(np.vander(levels[2:], 2) * weights[:, None]) ** 2 * EPS
    assert (-decay.beta, decay.a) == pytest.approx(tuple(line), rel=near)
    (aa, ab), (ba, bb) = decay.covariance
    assert (bb, -ab, -ba, aa) == pytest.approx(tuple(covariance.ravel()), rel=near)
    assert decay.at(12) == pytest.approx(2 ** np.polyval(line, 12), rel=12 * near)
    assert decay.log2_se(12) ** 2 == pytest.approx(np.array([12, 1]) @ covariance @ [12, 1], rel=12 * near)


def test_signal_decay_needs_four_finest_levels_above_0():
    """Three levels besides 0, or a finest level without variance, are not extrapolated."""
    assert signal_decay(range(4), [1.0, 0.5, 0.25, 0.125], [0.01] * 4) is None
    assert signal_decay(range(1, 6), [0.5, 0.25, 0.1, 0.05, 0.0], [0.01] * 5) is None
