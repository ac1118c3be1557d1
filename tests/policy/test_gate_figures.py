"""The figures of a gate: quantiles and bounds without numpy or scipy, against both."""

import math

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


def bounds_of(events, alpha, carriers):
    """Bounds of how many events were to be expected, from a count of them, each an error of 1."""
    return Spread.of(float(events), math.sqrt(events), carriers, 1, like=1.0).bounds(quantile(alpha, 10**6))


@pytest.mark.parametrize("alpha", [1e-2, 1e-4, 1e-6])
def test_bounds_of_a_variance_that_few_paths_carry_hold(alpha):
    """Exact: at either bound so many events, or so few, come with a probability of no more than alpha."""
    for events in range(1, 300):
        bounds = bounds_of(events, alpha, float(events))
        assert stats.poisson.sf(events - 1, bounds.low) <= alpha
        assert stats.poisson.cdf(events, bounds.high) <= alpha


def test_a_standard_error_alone_would_fail_by_chance():
    """Negative control: one event would pass for a proof of two hundredths of one, which bring it at 2 in 100."""
    assert stats.poisson.sf(0, bounds_of(1, 1e-4, None).low) > 100 * 1e-4


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
