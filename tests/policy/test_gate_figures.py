"""The figures of a gate: quantiles and bounds without numpy or scipy, against both."""

import math

import numpy as np
import pytest
from policy_records import policy
from scipy import stats

from narrowgauge.policy.gatefigures import Bounds, Spread, looks_of, quantile, rmse


@pytest.mark.parametrize("dof", [31, 63, 1023, 10**6])
@pytest.mark.parametrize("alpha", [0.3, 1e-2, 1e-3, 1e-4, 1e-6, 1e-7])
def test_the_quantile_is_students(alpha, dof):
    """Against scipy's; the expansion leaves terms of z^11 / dof^5, a hundredth of the quantile at its worst here."""
    z = float(stats.norm.ppf(1 - alpha / 2))
    left = z**11 / dof**5 / 3e3 + 1e-9  # 92,160 and more is what the terms of the expansion are divided by
    assert quantile(alpha, dof) == pytest.approx(float(stats.t.ppf(1 - alpha / 2, dof)), abs=left + 1e-4)


@pytest.mark.parametrize("events", [3, 10, 40, 400])
def test_bounds_of_a_variance_that_few_paths_carry_hold(events):
    """A count of paths with an error of 1: bounds at 1 in 100 miss the truth in at most 2 in 100 of 20,000 samples.

    False alarm: with a true rate of 1.2 in 100 that of a binomial past 2 in 100 is below 1e-20. What is accepted above
    the nominal rate is that of the square root of a count of three.
    """
    paths, reach = 100_000, quantile(0.01, 10**6)
    counts = np.random.default_rng(7).poisson(events, 20_000)
    missed = 0
    for count in counts:
        variance = count / paths
        se = math.sqrt(count) / paths
        bounds = Spread.of(variance, se, float(count), paths, like=1.0).bounds(reach)
        missed += not bounds.low <= events / paths <= bounds.high
    assert missed / counts.size <= 0.02


def test_without_the_count_the_same_bounds_do_not_hold():
    """Negative control: standard errors of three events alone miss the truth far more often, and after none always."""
    paths, reach = 100_000, quantile(0.01, 10**6)
    counts = np.random.default_rng(7).poisson(3, 20_000)
    missed = 0
    for count in counts:
        bounds = Spread.of(count / paths, math.sqrt(count) / paths, None, paths).bounds(reach)
        missed += not bounds.low <= 3 / paths <= bounds.high
    assert missed / counts.size > 0.04


def test_no_event_leaves_what_none_of_so_many_paths_allows():
    """exp(-N p) is 5 in 1,000 at the upper bound of a two-sided interval at 1 in 100."""
    bounds = Spread.of(0.0, 0.0, None, 1000, like=4.0).bounds(quantile(0.01, 10**6))
    assert bounds.low == bounds.estimate == 0.0
    assert bounds.high == pytest.approx(4.0 * math.log(1 / 0.01) / 1000, rel=1e-3)


def test_the_error_of_a_run_is_that_of_its_branches(record):
    """Variance over paths, summed over levels and branches, and the bias of the widest arm."""
    held = policy(record)
    planned = {one.level: one for one in held.levels}
    levels = {one.level: one for one in record.quantities["call"].levels}
    found = rmse(planned, levels, dict.fromkeys(planned, 3.0))
    total, bias = 0.0, 0.0
    for number, plan in planned.items():
        level = levels[number]
        total += level.arms["float16"].level_variance / plan.paths
        total += level.corrections["float16:float32"].variance / plan.correction_paths
        bias += level.corrections["float32:float64"].mean
    assert isinstance(found, Bounds)
    assert found.estimate == pytest.approx(math.sqrt(total + bias**2))
    assert found.low < found.estimate < found.high


@pytest.mark.parametrize(("most", "looks"), [(8192, 1), (16384, 2), (20000, 2), (131072, 5)])
def test_looks_are_those_of_the_audit(record, most, looks):
    """At `paths`, twice that ... up to `most_paths`."""
    import msgspec

    asked = {**record.asked, "sampling": {**record.asked["sampling"], "most_paths": most}}
    assert looks_of(msgspec.structs.replace(record, asked=asked)) == looks
