"""The example kernels in plain float64, against closed forms of the schemes that they step.

Where a sample is compared with an expectation the bound is five standard errors, two-sided: by the normal
approximation a false alarm in 5.7e-7 of seeds for each comparison, and every seed is fixed. The rate that a test
states is that figure times its comparisons.
"""

from __future__ import annotations

import cmath
import inspect
import math
from collections.abc import Mapping

import numpy as np
import pytest
from example_files import (
    EXAMPLES,
    NAMES,
    PATHS,
    STANDARD_ERRORS,
    Array,
    audit_file,
    increments,
    kernel_of,
    standard_errors_off,
)
from scipy.stats import norm


def variance_errors_off(sample: Array, expected: float) -> float:
    """Return the same for the sample's variance, its standard error from the fourth central moment."""
    squares = (sample - sample.mean()) ** 2
    return standard_errors_off(squares, expected)


# --- reserve: the price alone -------------------------------------------------------------------------------

# Inflow without noise that starts at its level stays at 1 MW to the bit, so that the option is on the price.
PRICE_ALONE = {
    "price_start": 1.0,
    "price_level": 0.5,
    "price_reversion": 1.5,
    "price_volatility": 0.3,
    "inflow_start": 1.0,
    "inflow_level": 1.0,
    "inflow_reversion": 1.0,
    "inflow_volatility": 0.0,
    "correlation": 0.0,
    "turbine_limit": 2.0,
    "fee": 0.0,
    "rate": 0.0,
}

# Mean and variance of an Ornstein-Uhlenbeck process after 16 Euler steps, with a = 1 - k h:
# mu + (x0 - mu) a^n and s^2 h (1 - a^(2n)) / (1 - a^2); computed from first principles for the figures above.
OU_MEAN, OU_VARIANCE = 0.603499515694072, 0.0301267326217769


def test_log_price_has_the_mean_and_variance_of_an_euler_ou_process() -> None:
    """The logarithm of the price has Euler's exact mean and variance; false alarms 1.1e-6 of seeds.

    Control: the mean and variance of the continuous process must be refused.
    """
    paid = kernel_of("reserve")(increments(101, 16, 2), 1.0 / 16, **PRICE_ALONE)["option"]
    log_price = np.log(paid)
    assert standard_errors_off(log_price, OU_MEAN) < STANDARD_ERRORS
    assert variance_errors_off(log_price, OU_VARIANCE) < STANDARD_ERRORS

    continuous_mean = 0.5 + 0.5 * math.exp(-1.5)
    continuous_variance = 0.3**2 * (1.0 - math.exp(-3.0)) / 3.0
    assert standard_errors_off(log_price, continuous_mean) > STANDARD_ERRORS
    assert variance_errors_off(log_price, continuous_variance) > STANDARD_ERRORS


def test_option_on_the_price_is_worth_the_lognormal_formula() -> None:
    """E (exp(x) - K)^+ discounted, x normal, is the lognormal call formula; false alarms 5.7e-7 of seeds.

    Control: the same formula without the discount must be refused.
    """
    fee, rate = 1.5, 0.1
    parameters = {**PRICE_ALONE, "fee": fee, "rate": rate}
    paid = kernel_of("reserve")(increments(102, 16, 2), 1.0 / 16, **parameters)["option"]
    deviation = math.sqrt(OU_VARIANCE)
    d = (OU_MEAN - math.log(fee)) / deviation
    call = math.exp(OU_MEAN + OU_VARIANCE / 2.0) * norm.cdf(d + deviation) - fee * norm.cdf(d)
    assert standard_errors_off(paid, math.exp(-rate) * call) < STANDARD_ERRORS
    assert standard_errors_off(paid, call) > STANDARD_ERRORS


# --- reserve: the inflow alone ------------------------------------------------------------------------------

# A price of exp(0) to the bit; the inflow stays eight stationary standard deviations above zero, so that
# truncation never acts (the stationary one is 0.2 sqrt(1.1 / 2.4) = 0.135).
INFLOW_ALONE = {
    **PRICE_ALONE,
    "price_start": 0.0,
    "price_level": 0.0,
    "price_volatility": 0.0,
    "inflow_start": 1.5,
    "inflow_level": 1.1,
    "inflow_reversion": 1.2,
    "inflow_volatility": 0.2,
    "correlation": -0.4,
    "turbine_limit": 1000.0,
}


def inflow_moments(steps: int) -> tuple[list[float], float]:
    """Return the exact means of the Euler inflow before each step and at the end, and its last variance.

    By conditioning on one step: m' = m + k h (theta - m), v' = (1 - k h)^2 v + s^2 h m.
    """
    h = 1.0 / steps
    means, variance = [INFLOW_ALONE["inflow_start"]], 0.0
    pull = INFLOW_ALONE["inflow_reversion"] * h
    for _ in range(steps):
        variance = (1.0 - pull) ** 2 * variance + INFLOW_ALONE["inflow_volatility"] ** 2 * h * means[-1]
        means.append(means[-1] + pull * (INFLOW_ALONE["inflow_level"] - means[-1]))
    return means, variance


def test_inflow_and_mean_output_have_the_moments_of_the_euler_square_root_process() -> None:
    """Mean and variance of the inflow and the mean output are Euler's exact ones; false alarms 1.7e-6.

    Control: an output that averages the ends of the steps instead of their beginnings must be refused.
    """
    steps = 8
    result = kernel_of("reserve")(increments(103, steps, 2), 1.0 / steps, **INFLOW_ALONE)
    means, variance = inflow_moments(steps)
    assert standard_errors_off(result["option"], means[-1]) < STANDARD_ERRORS
    assert variance_errors_off(result["option"], variance) < STANDARD_ERRORS
    assert standard_errors_off(result["output"], sum(means[:-1]) / steps) < STANDARD_ERRORS
    assert standard_errors_off(result["output"], sum(means[1:]) / steps) > STANDARD_ERRORS


def test_turbine_takes_no_more_than_its_limit() -> None:
    """Where the inflow never falls below the limit the output is the limit, to the bit.

    0.125 is 7.2 stationary standard deviations below the level: false alarms below 8 x 65,536 x 3.1e-13 =
    1.6e-7 of seeds. Control: a limit in the middle of the inflow must not be met to the bit.
    """
    kernel, draws = kernel_of("reserve"), increments(104, 8, 2)
    low = kernel(draws, 0.125, **{**INFLOW_ALONE, "turbine_limit": 0.125})["output"]
    middle = kernel(draws, 0.125, **{**INFLOW_ALONE, "turbine_limit": 1.25})["output"]
    assert np.all(low == 0.125)
    assert not np.all(middle == 1.25)


def test_inflow_below_zero_is_fully_truncated() -> None:
    """After a step below zero only the pull to the level acts, whatever the next draw is.

    By hand, with h = 1/2, level, pull and volatility 1: 1 - 1.25 = -0.25, then -0.25 + 0.5 = 0.25, every
    number a sum of powers of two. Absorbing at zero would give 0.5, reflecting 0.25 + 0.375 + noise.
    """
    parameters = {**INFLOW_ALONE, "inflow_start": 1.0, "inflow_level": 1.0, "inflow_reversion": 1.0}
    parameters |= {"inflow_volatility": 1.0, "correlation": 0.0}
    draws = np.zeros((2, 2, 3))
    draws[0, 1] = -1.25
    draws[1, 1] = [-1.0, 0.0, 1.0]
    result = kernel_of("reserve")(draws, 0.5, **parameters)
    assert result["option"].tolist() == [0.25, 0.25, 0.25]
    assert result["output"].tolist() == [0.5, 0.5, 0.5]


def test_price_and_inflow_have_the_stated_correlation() -> None:
    """After one step, which is linear in the draws, the correlation is the parameter; false alarms 5.7e-7.

    The standard error of a normal sample's correlation r is (1 - r^2) / sqrt(N). Control: a correlation that
    is off by 0.05 must be refused.
    """
    kernel, draws = kernel_of("reserve"), increments(105, 1, 2)
    log_price = np.log(kernel(draws, 1.0, **PRICE_ALONE)["option"])
    inflow = kernel(draws, 1.0, **INFLOW_ALONE)["option"]
    correlation = float(np.corrcoef(log_price, inflow)[0, 1])
    standard_error = (1.0 - 0.4**2) / math.sqrt(PATHS)
    assert abs(correlation + 0.4) < STANDARD_ERRORS * standard_error
    assert abs(correlation + 0.35) > STANDARD_ERRORS * standard_error


# --- membrane -----------------------------------------------------------------------------------------------

# Without a membrane the particle in its trap is an Ornstein-Uhlenbeck process.
TRAP_ALONE = {
    "start": 1.4,
    "centre": 2.0,
    "stiffness": 2.0,
    "barrier": 0.0,
    "width": 0.5,
    "diffusion": 1.0,
    "slowing": 0.0,
    "memory": 1.0,
}


def trap_moments(step: int, h: float) -> tuple[float, float]:
    """Return mean and variance of y after that many Euler steps, by the formulas of the log price above."""
    a = 1.0 - TRAP_ALONE["diffusion"] * TRAP_ALONE["stiffness"] * h
    noise = 2.0 * TRAP_ALONE["diffusion"] * h
    return -0.6 * a**step, noise * (1.0 - a ** (2 * step)) / (1.0 - a**2)


def test_particle_without_a_membrane_crosses_as_often_as_a_normal_variable() -> None:
    """The share that crosses is Phi(mean / deviation) of Euler's exact law; false alarms 5.7e-7 of seeds.

    Control: the share of the continuous process must be refused.
    """
    steps = 4
    crossed = kernel_of("membrane")(increments(106, steps, 1), 1.0 / steps, **TRAP_ALONE)["crossed"]
    sample = crossed.astype(np.float64)
    mean, variance = trap_moments(steps, 1.0 / steps)
    assert standard_errors_off(sample, norm.cdf(mean / math.sqrt(variance))) < STANDARD_ERRORS

    continuous_mean, continuous_variance = -0.6 * math.exp(-2.0), (1.0 - math.exp(-4.0)) / 2.0
    continuous = norm.cdf(continuous_mean / math.sqrt(continuous_variance))
    assert standard_errors_off(sample, continuous) > STANDARD_ERRORS


def test_detector_reads_the_filtered_energy_of_the_trap() -> None:
    """The mean reading is the weighted sum of E U = stiffness (m^2 + v) / 2 before each step; 5.7e-7.

    Control: the same sum over the ends of the steps must be refused.
    """
    steps = 4
    h = 1.0 / steps
    reading = kernel_of("membrane")(increments(107, steps, 1), h, **TRAP_ALONE)["energy"]
    keep = math.exp(-h / TRAP_ALONE["memory"])

    def filtered(first: int) -> float:
        total = 0.0
        for step in range(first, first + steps):
            mean, variance = trap_moments(step, h)
            total = keep * total + (1.0 - keep) * TRAP_ALONE["stiffness"] * (mean**2 + variance) / 2.0
        return total

    assert standard_errors_off(reading, filtered(0)) < STANDARD_ERRORS
    assert standard_errors_off(reading, filtered(1)) > STANDARD_ERRORS


def membrane_law(y: complex, parameters: Mapping[str, float]) -> tuple[complex, complex]:
    """Return energy and mobility at y as the example's documentation states them."""
    inside = cmath.exp(-((y / parameters["width"]) ** 2))
    energy = parameters["stiffness"] * y * y / 2.0 + parameters["barrier"] * inside
    return energy, parameters["diffusion"] * (1.0 - parameters["slowing"] * inside)


def test_step_through_the_membrane_follows_energy_and_mobility() -> None:
    """One step is y + (D' - D U') h + sqrt(2 D) dW, with D' and U' taken from D and U themselves.

    The derivatives are f(y + i e) / e with e = 1e-30, imaginary part, which is exact to rounding ("Using complex
    variables to estimate derivatives of real functions", SIAM Review 40(1), 1998, doi
    10.1137/S003614459631241X, recalled from memory). A detector without memory reads U after the step. Either
    side takes fewer than 64 roundings, each of at most 2^-53 of the largest number of the step, and U multiplies
    an error of y by at most |U'|. Control: the step without D' must be refused.
    """
    parameters: dict[str, float] = {**audit_file("membrane")["parameters"], "memory": 1e-4}
    h = 0.125  # exp(-h / memory) = exp(-1250) is 0 in float64
    draws = np.zeros((2, 41))
    draws[0] = np.linspace(-1.5, 1.5, 41)
    reading = kernel_of("membrane")(draws, h, **parameters)["energy"]

    y = parameters["start"] - parameters["centre"]
    energy_slope, mobility_slope = (part.imag / 1e-30 for part in membrane_law(y + 1e-30j, parameters))
    mobility = membrane_law(y, parameters)[1].real
    without = y - mobility * energy_slope * h + math.sqrt(2.0 * mobility) * draws[0]
    exact = without + mobility_slope * h
    refused = 0
    for read, right, wrong in zip(reading, exact, without, strict=True):
        steepness = abs(membrane_law(right + 1e-30j, parameters)[0].imag / 1e-30)
        energy = membrane_law(right, parameters)[0].real
        largest = parameters["centre"] + abs(energy_slope) + abs(mobility_slope) + abs(right)
        bound = 2.0 * 64.0 * 2.0**-53 * (largest * (1.0 + steepness) + energy)
        assert abs(read - energy) <= bound
        refused += abs(read - membrane_law(wrong, parameters)[0].real) > bound
    assert refused == reading.size


# --- both: what a kernel must be ----------------------------------------------------------------------------


@pytest.mark.parametrize("name", NAMES)
def test_kernel_is_a_function_of_its_draws_path_by_path(name: str) -> None:
    """A second run gives the same bits, exchanged paths give exchanged results, and the draws stay as they were.

    256 paths, so that no vector unit meets a remainder. Control: results that are not exchanged must differ.
    """
    document = audit_file(name)
    kernel, n = kernel_of(name), document["ladder"]["coarsest_steps"]
    draws = increments(108, n, document["kernel"]["factors"], paths=256)
    kept = draws.copy()
    first = kernel(draws, 1.0 / n, **document["parameters"])
    assert np.array_equal(draws, kept)
    second = kernel(draws, 1.0 / n, **document["parameters"])
    exchanged = kernel(np.ascontiguousarray(draws[..., ::-1]), 1.0 / n, **document["parameters"])
    for quantity, values in first.items():
        assert values.shape == (256,)
        assert np.array_equal(values, second[quantity])
        assert np.array_equal(values[::-1], exchanged[quantity])
        assert not np.array_equal(values, exchanged[quantity])


@pytest.mark.parametrize("name", NAMES)
def test_audit_file_fits_its_kernel(name: str) -> None:
    """The audit file gives every keyword of the kernel and no other, and a target for every quantity."""
    document = audit_file(name)
    signature = inspect.signature(kernel_of(name)).parameters.values()
    keywords = {parameter.name for parameter in signature if parameter.kind is parameter.KEYWORD_ONLY}
    assert set(document["parameters"]) == keywords
    shape = (1, 1) if document["kernel"]["factors"] == 1 else (1, document["kernel"]["factors"], 1)
    returned = kernel_of(name)(np.zeros(shape), 1.0, **document["parameters"])
    assert set(document["target"]["rmse"]) == set(returned)


@pytest.mark.parametrize("name", NAMES)
def test_every_file_says_that_its_data_are_invented(name: str) -> None:
    """Kernel and audit file both carry the words INVENTED DATA within their first three lines."""
    files = [path for path in (EXAMPLES / name).iterdir() if path.suffix in {".py", ".toml"}]
    assert len(files) == 2
    for path in files:
        assert "INVENTED DATA" in " ".join(path.read_text(encoding="utf-8").splitlines()[:3])
