"""Other ways to round against what theory says of them: a geometric Brownian path, Euler, end value, in float16."""

from __future__ import annotations

import math

import numpy as np
import pytest

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.stochastic import Stochastic
from narrowgauge.conduct.lineroles import Seen
from narrowgauge.dispatch.placed import Carried
from narrowgauge.judge.accumulation import LawPoint, fit
from narrowgauge.judge.intervals import jackknife, means, variances
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.linearms import LineRunner, Variant

HALF = FORMATS["float16"]
PATHS = 2**16
LEVELS = range(9)
# Both are values of float16, so that no constant is moved: what is left of a mean error is that of the roundings.
RATE, VOLATILITY = float(np.float16(0.05)), float(np.float16(0.2))


def geometric(dW, h):
    S = np.full(dW.shape[1], 1.0)
    for dw in dW:
        S = S + S * (RATE * h + VOLATILITY * dw)
    return S


FILE = audit_file_from(
    {
        "kernel": {"run": geometric, "takes": "increments"},
        "ladder": {"horizon": 1.0, "finest": 8},
        "formats": {"narrow": ["float16"], "wide": ["float64"]},
        "sampling": {"seed": 3, "block": 16384},
    }
)


def stochastic(level, block):
    return Arithmetic(format=HALF, rounding="stochastic", stream=Stochastic(3, level, block))


@pytest.fixture(scope="module")
def errors():
    """The series of E by way of rounding and level."""
    runner = LineRunner(FILE, find_kernel(FILE), "float16")
    seen = Seen()
    runner.observed(2, 16, seen)
    assert len(seen.sums) == 1
    sums = frozenset(seen.sums)
    runs = {
        "nearest": Variant(make=lambda level, block: Arithmetic(format=HALF)),
        "stochastic": Variant(make=stochastic, anew=True),
        "carried": Variant(make=lambda level, block: Carried(HALF, sums)),
    }
    found = {name: [] for name in runs}
    for level in LEVELS:
        blocks = math.ceil(PATHS / runner.paths(level))
        tallies = [runner.judged(level, block, runs) for block in range(blocks)]
        for name in runs:
            series = [tally[name].quantities["value"].errors["float16"] for tally in tallies]
            found[name].append(sum(series[1:], series[0]))
    return found


def variance(series):
    return series.moments.variance


def law(series):
    points = [
        LawPoint(
            level=level,
            steps=2**level,
            variance=variance(one),
            se=jackknife(variances(one), 0.05).se,
            dof=31,
            mean=one.moments.average,
            value_variance=1.0,
        )
        for level, one in enumerate(series)
    ]
    return fit(points, HALF.unit_roundoff, confidence=0.99)


def slope(series):
    return np.polyfit(np.log([2**level for level in LEVELS]), np.log([variance(one) for one in series]), 1)[0]


def test_carried_errors_do_not_add_up(errors):
    """The error variance has no slope in the number of steps, and is on level 8 what it is on level 0."""
    assert abs(slope(errors["carried"])) <= 0.05
    assert variance(errors["carried"][8]) == pytest.approx(variance(errors["carried"][0]), rel=0.15)


def test_errors_that_are_not_carried_would_be_noticed(errors):
    """Negative control: to nearest, the variance grows with the steps."""
    assert slope(errors["nearest"]) > 0.5


def test_stochastic_rounding_walks_twice_as_far(errors):
    """The variance of a stochastic rounding is ulp^2 / 6 on average, twice that of one to nearest, within 5%."""
    assert law(errors["stochastic"]).walk == pytest.approx(2 * law(errors["nearest"]).walk, rel=0.05)


def test_stochastic_rounding_has_no_mean_error(errors):
    """Within 3.9 standard errors on each of nine levels, a false alarm in 1,100; nearest is past 10 on at least 4."""
    t = {name: [abs(o.moments.average) / jackknife(means(o), 0.05).se for o in errors[name]] for name in errors}
    assert max(t["stochastic"]) <= 3.9
    assert sum(one > 10 for one in t["nearest"]) >= 4
