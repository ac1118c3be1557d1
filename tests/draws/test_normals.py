"""Normals by inversion: published quantiles, a 50-digit oracle, symmetry, and their law.

Bounds are relative errors of the two functions as their author states them, in units of eps = 2^-52: the quantile
7.2e-16 and the distribution function 3.4e-14 at most ("Cephes mathematical library", documentation of ndtri and ndtr,
recalled from memory).
"""

from __future__ import annotations

import math

import mpmath  # type: ignore[import-untyped]  # it has no stubs
import numpy as np
import pytest
from scipy.stats import kstest

from narrowgauge.draws.normals import exact_normals, normal_cdf
from narrowgauge.draws.streams import Purpose, uniforms

EPS = 2.0**-52
QUANTILE_ERROR = 4 * EPS  # 8.9e-16
CDF_ERROR = 154 * EPS  # 3.4e-14
FALSE_ALARM = 1e-6


def half_ulp(value: float) -> float:
    return math.ulp(value) / 2


def density(normal: float) -> float:
    return math.exp(-normal * normal / 2) / math.sqrt(2 * math.pi)


@pytest.mark.parametrize(
    ("probability", "quantile"),
    [
        # "Handbook of mathematical functions", Abramowitz and Stegun, tables 26.5 and 26.6 (recalled from memory).
        (0.975, 1.9599639845400542),
        (0.999, 3.0902323061678135),
        (1.0 - 1e-6, 4.7534243088228989),
        # "Algorithm AS 241: The percentage points of the normal distribution", Applied Statistics 37(3), 1988,
        # doi 10.2307/2347330 (recalled from memory).
        (0.25, -0.6744897501960817),
        (1e-20, -9.262340089798408),
    ],
)
def test_published_quantiles(probability: float, quantile: float) -> None:
    """Quantiles are the published ones, to the error of the function and of the probability as a float64.

    A probability off by d moves the quantile by d / density; 1 - 1e-6 is off by half an ulp of 1 and of 1e-6.
    """
    (found,) = exact_normals(np.array([probability]))
    moved = (half_ulp(probability) + half_ulp(1e-6)) / density(quantile) if probability > 0.5 else 0.0
    moved += half_ulp(probability) / density(quantile)
    assert abs(float(found) - quantile) <= QUANTILE_ERROR * abs(quantile) + half_ulp(quantile) + moved


def sample_of_uniforms() -> list[float]:
    """Both ends of what a stream can give, powers of two towards them, and random ones between."""
    powers = [2.0**-k for k in range(2, 54)]
    random: list[float] = uniforms(5, Purpose.TRIAL, 0, 0, (500,)).tolist()
    return [*powers, *(1.0 - power for power in powers), *random, 0.5 - 2.0**-53, 0.5 + 2.0**-52]


def test_quantiles_against_a_50_digit_distribution_function() -> None:
    """Phi of each quantile, to 50 digits, is the uniform, to the relative error of the quantile alone."""
    given = sample_of_uniforms()
    with mpmath.workdps(50):
        for uniform, normal in zip(given, exact_normals(np.array(given)).tolist(), strict=True):
            assert abs(mpmath.ncdf(normal) - mpmath.mpf(uniform)) <= density(normal) * abs(normal) * QUANTILE_ERROR


def test_distribution_function_against_50_digits() -> None:
    """Phi has the relative error that its author states, from -8.3 to 8.3, where the uniforms end."""
    given = np.linspace(-8.3, 8.3, 333)
    with mpmath.workdps(50):
        for normal, value in zip(given.tolist(), normal_cdf(given).tolist(), strict=True):
            exact = mpmath.ncdf(mpmath.mpf(normal))
            assert abs(value - exact) <= CDF_ERROR * exact


def test_one_half_is_exactly_zero_and_back() -> None:
    """The median is 0 both ways."""
    assert exact_normals(np.array([0.5])).tolist() == [0.0]
    assert normal_cdf(np.array([0.0])).tolist() == [0.5]


def test_quantiles_are_monotone_and_antisymmetric() -> None:
    """Larger uniforms have larger normals, and 1 - u, exact on this grid, the negative one."""
    grid = (np.arange(2048, dtype=np.float64) + 0.5) / 2048
    normals = exact_normals(grid)
    assert np.all(np.diff(normals) > 0)
    assert np.all(np.abs(normals + exact_normals(1.0 - grid)) <= 2 * QUANTILE_ERROR * np.abs(normals))


def test_shapes_are_kept() -> None:
    """Arrays keep their shape and are float64 both ways."""
    normals = exact_normals(np.full((2, 3, 4), 0.75))
    assert normals.shape == (2, 3, 4)
    assert normals.dtype == np.float64
    back = normal_cdf(normals)
    assert back.shape == (2, 3, 4)
    assert back.dtype == np.float64


def test_normals_of_a_stream_are_normal() -> None:
    """The normals of 2^18 uniforms pass the Kolmogorov-Smirnov test at a false-alarm rate of 1e-6.

    Negative control: the same normals 5% too wide.
    """
    normals = exact_normals(uniforms(21, Purpose.AUDIT, 4, 0, (2**18,)))
    assert kstest(normals, "norm").pvalue > FALSE_ALARM
    assert kstest(1.05 * normals, "norm").pvalue < FALSE_ALARM
