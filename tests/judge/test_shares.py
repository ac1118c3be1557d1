"""Shares of parts in a variance: alone, saved and their mean, from errors that are known exactly."""

from __future__ import annotations

import math

import numpy as np
import pytest
from judge_cases import NEAR, PATHS, shape, uneven

from narrowgauge.judge.lines import leading, shares_of
from narrowgauge.measure.moments import Series


def shares(parts, alpha=0.01):
    """The shares of errors by part whose sum is the whole."""
    whole = sum(parts.values())
    alone = {name: Series.of(values) for name, values in parts.items()}
    saved = {name: Series.of(whole - values) for name, values in parts.items()}
    return shares_of(Series.of(whole), alone, saved, alpha)


def test_independent_parts_have_the_shares_of_their_variances():
    """Three ways of looking give the same, and all add up to 1."""
    found = shares({"a": 3.0 * shape(0), "b": 4.0 * shape(1)})
    for name, share in (("a", 9 / 25), ("b", 16 / 25)):
        one = found.parts[name]
        for interval in (one.alone, one.saved, one.mean):
            assert interval.estimate == pytest.approx(share, abs=NEAR)
            assert interval.high - interval.low < NEAR
    assert (found.alone.estimate, found.saved.estimate, found.mean.estimate) == pytest.approx((1, 1, 1), abs=NEAR)


def test_parts_that_go_together_add_up_in_the_mean_alone():
    """With a common part alone shares miss what both saved shares have; the means still add up."""
    common = shape(2)
    found = shares({"a": shape(0) + common, "b": shape(1) + common})
    whole = 1 + 1 + 4
    assert found.alone.estimate == pytest.approx((2 + 2) / whole, abs=NEAR)
    assert found.saved.estimate == pytest.approx(2 * (whole - 2) / whole, abs=NEAR)
    assert found.mean.estimate == pytest.approx(1.0, abs=NEAR)


def test_an_interval_is_as_wide_as_the_batches_differ():
    """A share that differs from batch to batch is known less well, and covers what it is."""
    found = shares({"a": uneven(0.5) * shape(0), "b": shape(1)}).parts["a"].mean
    even = (1.5**2 + 0.5**2) / 2
    assert found.estimate == pytest.approx(even / (even + 1), rel=1e-3)
    assert found.low < even / (even + 1) < found.high
    assert found.high - found.low > 0.05


def test_no_error_has_no_shares():
    """Where everything rounded makes no difference nothing is shared out."""
    nothing = Series.of(np.zeros(PATHS))
    found = shares_of(nothing, {"a": nothing}, {"a": nothing}, 0.01)
    assert (dict(found.parts), found.mean, found.reason) == ({}, None, "no error that varies")


def test_a_run_that_overflows_loses_its_share_alone():
    """What is not finite in one run is said, other parts keep their shares, and nothing is added up."""
    broken = shape(0).copy()
    broken[7] = np.inf
    whole = shape(0) + shape(1)
    alone = {"a": Series.of(broken), "b": Series.of(shape(1))}
    saved = {"a": Series.of(shape(1)), "b": Series.of(shape(0))}
    found = shares_of(Series.of(whole), alone, saved, 0.01)
    assert math.isnan(found.parts["a"].mean.estimate)
    assert found.parts["b"].mean.estimate == pytest.approx(0.5, abs=NEAR)
    assert found.mean is None
    assert found.reason == "values that are not finite in single runs"
    assert shares_of(Series.of(broken), alone, saved, 0.01).reason == "values that are not finite"


def test_candidates_are_ordered_by_what_they_save():
    """The part that saves most in any quantity comes first; what saves little is no candidate."""
    first = shares({"a": 1.0 * shape(0), "b": 3.0 * shape(1), "c": 0.1 * shape(2)})
    second = shares({"a": 9.0 * shape(0), "b": 1.0 * shape(1), "c": 0.1 * shape(2)})
    assert leading([first], 0.02) == ["b", "a"]
    assert leading([first, second], 0.02) == ["a", "b"]
    assert leading([first], 0.0) == ["b", "a", "c"]
