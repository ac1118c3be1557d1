"""A small run of the study of a reordered update."""

import pytest
import reordered_update as study


@pytest.fixture(scope="module")
def found():
    return study.mismatches(study.LEVELS, 2**14)


def test_on_coarse_levels_the_bias_is_a_part_of_the_target(found):
    """Measured beforehand by another program: .1 to .4 times the target RMSE on levels 1 to 6.

    The intervals at 2^14 paths reach into that. Level 5, which the study speaks of, is none of them here.
    """
    for level in (1, 2, 3, 4, 6):
        one = found[level][1]
        low, high = sorted((abs(one.low), abs(one.high)))
        assert low < 0.4 * study.RMSE
        assert high > 0.1 * study.RMSE
        assert high < study.RMSE


def test_where_the_drift_alone_is_lost_the_bias_is_many_times_the_target(found):
    """Measured beforehand: 18.6 times on level 8. Within a tenth of it, and its interval above ten times."""
    one = found[8][1]
    assert abs(one.estimate) / study.RMSE == pytest.approx(18.6, rel=0.1)
    assert min(abs(one.low), abs(one.high)) > 10 * study.RMSE


def test_it_is_no_smooth_function_of_the_level(found):
    """Where the drift is 1.6 units in the last place of S, on level 5, the bias is larger than beside it."""
    assert abs(found[5][1].estimate) > 4 * max(abs(found[4][1].estimate), abs(found[6][1].estimate))
