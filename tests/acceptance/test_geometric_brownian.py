"""The main job against closed forms: a geometric Brownian path, Euler, end value, every operation rounded."""

import dataclasses
import math

import numpy as np
import pytest

from narrowgauge.conduct.account import account
from narrowgauge.conduct.run import run
from narrowgauge.judge.schemes import judge_level
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.record.audit import KernelEntry

RATE, VOLATILITY = 0.05, 0.2
PATHS = 2**17
FORMATS = ("float16", "bfloat16", "float32")

# c = (1/12) int_0^T E[(ulp(S_t)/u)^2] e^((2r + s^2)(T - t)) dt, the walk of rounding the state each step: computed from
# first principles by quadrature for this r, s and T. A linear payoff's correction has 1.5 times that variance.
WALK = {1.0: 0.2342, 100.0: 1700.0}
CORRECTION_WALK = 0.3513

# Finest level where a split over float64 beats float64 alone, the correction charged both costs: from the exact V_l
# and Var R_l = .3513 u^2 / h_l, by cost ratio.
FINEST = {0.5: {"float16": 4, "bfloat16": 1, "float32": 17}, 0.25: {"float16": 5, "bfloat16": 2, "float32": 18}}


def geometric(dW, h, start, rate=RATE, volatility=VOLATILITY):
    S = np.full(dW.shape[1], start)
    for dw in dW:
        S = S + (rate * h * S + volatility * S * dw)
    return S


def file_for(start, ratio):
    return audit_file_from(
        {
            "kernel": {"run": geometric, "takes": "increments"},
            "parameters": {"start": start},
            "ladder": {"horizon": 1.0, "finest": 8},
            "formats": {"wide": ["float64"], "schemes": ["split"]},
            "cost": {"float64": 1.0, "float32": ratio, "float16": ratio, "bfloat16": ratio},
            "sampling": {"paths": PATHS, "most_paths": PATHS, "seed": 7},
        }
    )


@pytest.fixture(scope="module")
def outcomes():
    return {start: run(file_for(start, 0.5), find_kernel(file_for(start, 0.5))) for start in WALK}


def record_of(outcome, start, ratio):
    """The same paths, judged at another cost ratio."""
    file = file_for(start, ratio)
    judgements = {level: judge_level(tally, file, outcome.alpha) for level, tally in outcome.tallies.items()}
    other = dataclasses.replace(outcome, judgements=judgements)
    return account(file, other, KernelEntry(run="geometric", fingerprint="sha256:none"), {})


def exact_level_variance(level):
    """Var of S_fine - S_coarse on the same draws, from the second moments of one coarse step."""
    fine = 2.0**-level
    a, b, v = 1 + RATE * fine, 1 + 2 * RATE * fine, VOLATILITY**2 * fine
    n = 2 ** (level - 1)
    squares = (a * a + v) ** (2 * n) + (b * b + 2 * v) ** n - 2 * (a * a * b + 2 * a * v) ** n
    return squares - (a ** (2 * n) - b**n) ** 2


@pytest.mark.parametrize(("level", "value"), [(1, 4.25e-4), (4, 5.69681014407e-5), (8, 3.59247973021e-6)])
def test_the_closed_form_of_the_level_variance(level, value):
    """The formula used below gives the values computed independently from first principles."""
    digits = 12 if level > 1 else 3
    assert exact_level_variance(level) == pytest.approx(
        value, rel=0.5 * 10 ** (1 - digits) / (value / 10 ** math.floor(math.log10(value)))
    )


@pytest.mark.parametrize("ratio", [0.5, 0.25])
def test_finest_paying_level_is_the_one_of_the_closed_form(outcomes, ratio):
    """float16 and bfloat16 exactly, float32 within one level, extrapolated and labelled so."""
    found = record_of(outcomes[1.0], 1.0, ratio).verdict.finest_paying_level
    assert found["float16"].level == FINEST[ratio]["float16"]
    assert found["bfloat16"].level == FINEST[ratio]["bfloat16"]
    assert not found["float16"].extrapolated
    assert not found["bfloat16"].extrapolated
    assert abs(found["float32"].level - FINEST[ratio]["float32"]) <= 1
    assert found["float32"].extrapolated
    assert found["float32"].cautious <= found["float32"].level <= found["float32"].possible


@pytest.mark.parametrize("start", [1.0, 100.0])
@pytest.mark.parametrize("name", FORMATS)
def test_the_walk_of_the_error_is_the_quadrature_of_its_closed_form(outcomes, start, name):
    """Walk coefficient within 2%, drift below 5% of the fitted variance on the finest level."""
    law = record_of(outcomes[start], start, 0.5).quantities["value"].accumulation[name].error
    assert law.walk == pytest.approx(WALK[start], rel=0.02)
    n = 256
    assert law.drift * n**2 < 0.05 * (law.floor + law.walk * n + law.drift * n**2)


@pytest.mark.parametrize("name", FORMATS)
def test_the_walk_of_the_correction_is_one_and_a_half_times_that(outcomes, name):
    """Walk coefficient of Var R within 2% for the linear payoff."""
    law = record_of(outcomes[1.0], 1.0, 0.5).quantities["value"].accumulation[name].correction
    assert law.walk == pytest.approx(CORRECTION_WALK, rel=0.02)


def test_level_variances_are_the_exact_ones(outcomes):
    """Every V_l within four standard errors: false-alarm rate 8 times 6e-5; the fixed seed is 7."""
    for level in record_of(outcomes[1.0], 1.0, 0.5).quantities["value"].levels[1:]:
        error = level.reference.level_variance - exact_level_variance(level.level)
        assert abs(error) <= 4 * level.reference.level_variance_se, level.level


def test_a_wrong_level_variance_would_be_noticed(outcomes):
    """Negative control: variances 3% too large are rejected on some level."""
    levels = record_of(outcomes[1.0], 1.0, 0.5).quantities["value"].levels[1:]
    assert any(
        abs(level.reference.level_variance - 1.03 * exact_level_variance(level.level))
        > 4 * level.reference.level_variance_se
        for level in levels
    )


def test_the_ladder_telescopes_and_formats_agree(outcomes):
    """The reference's levels add up, and the delta^2 part of the law holds across formats."""
    record = record_of(outcomes[1.0], 1.0, 0.5)
    assert record.verdict.sound
    assert record.quantities["value"].agreement.agrees
