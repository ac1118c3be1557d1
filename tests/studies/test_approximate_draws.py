"""A small run of the study of approximate draws."""

import approximate_draws as study
import numpy as np
import pytest

from narrowgauge.draws.approximate import Constant
from narrowgauge.judge.separation import slope

CELLS, LEVELS, PATHS = 2**8, range(5, 9), 2**16


@pytest.fixture(scope="module")
def found():
    return study.corrections(CELLS, LEVELS, PATHS)


@pytest.mark.parametrize("level", LEVELS)
def test_the_correction_of_a_smooth_quantity_has_the_variance_of_its_closed_form(found, level):
    """Within 4 standard errors of the sample (false-alarm rate 6e-5 a level, seed 1); half of it is told apart."""
    moments = found["end"][level].moments
    se = moments.variance * np.sqrt((moments.kurtosis - 1) / moments.total)
    assert abs(moments.variance - study.exact_variance(CELLS, level)) < 4 * se
    assert abs(moments.variance - 0.5 * study.exact_variance(CELLS, level)) > 4 * se


@pytest.mark.parametrize("cells", [2**6, 2**8, 2**10])
def test_a_smooth_quantity_goes_like_h(cells):
    """Over levels 6 to 10 the slope of the closed form is within .03 of 1, the bound set for the study."""
    assert abs(study.exact_slope(cells) - 1) < 0.03


def test_a_call_goes_more_slowly(found):
    """Between .45 and 1.05, the bounds set for the study, and its interval below that of the smooth quantity."""
    smooth, call = (slope(found[name], 2, 0.01) for name in ("end", "call"))
    assert 0.45 < call.estimate < 1.05
    assert call.high < smooth.low


@pytest.mark.parametrize("level", [0, 2])
def test_strata_are_what_they_say(level):
    """Inside no draw lies in an outermost cell, outside at least one on every path."""
    source = np.random.Generator(np.random.PCG64DXSM(3))
    table = Constant.of(16)
    for outside in (False, True):
        drawn = study.uniforms(source, 2**level, 4096, 16, outside)
        outermost = np.abs(table(drawn)) == table.values[-1]
        assert (outermost.any(axis=0) == outside).all()


@pytest.mark.parametrize("level", [0, 2])
def test_strata_put_together_have_the_variance_of_all_paths(level):
    """Within 4 standard errors of both samples (false-alarm rate 6e-5, seed 1), and half of the share does not."""
    cells = 2**6
    plain = study.corrections(cells, range(level, level + 1), study.PATHS)["end"][level]
    share, (inside, outside) = study.strata(cells, level)
    whole, gain = study.gain(share, inside, outside)
    moments = plain.moments
    se = moments.variance * np.sqrt((moments.kurtosis - 1) / moments.total)
    assert abs(whole - moments.variance) < 4 * np.sqrt(2) * se
    assert abs(study.gain(share / 2, inside, outside)[0] - moments.variance) > 4 * np.sqrt(2) * se
    assert gain > 1
