"""What arithmetic, draws and both do to a correction, and its order in h, from tallies of known variances."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from judge_cases import EPS, NEAR, PATHS, shape, uneven

from narrowgauge.judge.intervals import jackknife, variances
from narrowgauge.judge.separation import order, parts, slope
from narrowgauge.measure.arms import arms_of, pairs_of
from narrowgauge.measure.moments import Moments, Series
from narrowgauge.measure.tally import QuantityTally

ARMS = ("float16", "float16/approximate", "float64/approximate")


def tally_of(arithmetic, draws):
    """The tally of a format whose two errors are `arithmetic` and `draws`, per path, and simply add."""
    reference = 4.0 * shape(0)
    errors = dict(zip(ARMS, (arithmetic, arithmetic + draws, draws), strict=True))
    values = {"float64": reference, **{name: reference - error for name, error in errors.items()}}
    names = arms_of(list(values))
    return QuantityTally(
        values={name: Series.of(values[name]) for name in names},
        errors={name: Series.of(values[name] - reference) for name in names[1:]},
        differences={name: Series.of(values[name]) for name in names},
        corrections={(a, b): Series.of(values[b] - values[a]) for a, b in pairs_of(names, ["float64"])},
        coarse=Moments.of(reference),
    )


def test_each_part_is_the_correction_of_its_own_arm():
    """Independent errors of variance 1 and 1/4: the parts are these, and both their sum."""
    found = parts(tally_of(shape(1), 0.5 * shape(2)), "float16", 0.01)
    variances_found = [one.moments.variance for one in (found.arithmetic, found.draws, found.both)]
    assert variances_found == pytest.approx([1.0, 0.25, 1.25], rel=NEAR)
    assert found.ratio.estimate == pytest.approx(0.25, rel=NEAR)
    assert found.larger == "arithmetic"


def test_the_larger_part_is_named_by_the_interval_alone():
    """The draws where they are larger, nobody where the interval of the ratio holds 1."""
    assert parts(tally_of(0.5 * shape(1), shape(2)), "float16", 0.01).larger == "draws"
    close = parts(tally_of(shape(1) * uneven(0.5), 1.1 * shape(2)), "float16", 0.01)
    assert close.ratio.low < 1 < close.ratio.high
    assert close.larger is None


def test_the_interval_of_the_ratio_is_the_jackknife_of_its_logarithm():
    """The same draws are in both, so that they are left out together."""
    tally = tally_of(shape(1) * uneven(0.2), shape(2) * uneven(0.1))
    found = parts(tally, "float16", 0.05).ratio
    one, other = (tally.corrections[name, "float64"] for name in ("float64/approximate", "float16"))
    wanted = jackknife(np.log(variances(one)) - np.log(variances(other)), 0.05).exponential()
    assert (found.estimate, found.low, found.high) == (wanted.estimate, wanted.low, wanted.high)


def test_a_part_that_few_paths_carry_is_not_compared():
    """Its figures stay; but the sample does not know what it misses, so that no part is called larger."""
    rare = np.where(np.arange(PATHS) % 256 == 0, shape(2), 0.0)
    assert Series.of(rare).effective_size < 50
    found = parts(tally_of(shape(1) / 1024, rare), "float16", 0.01)
    assert found.draws is not None
    assert found.ratio is None
    assert found.larger is None


def test_an_arm_that_raised_has_no_part():
    """The others stay."""
    tally = tally_of(shape(1), shape(2))
    gone = {pair: series for pair, series in tally.corrections.items() if pair[0] != "float16"}
    found = parts(replace(tally, corrections=gone), "float16", 0.01)
    assert found.arithmetic is None
    assert found.ratio is None
    assert found.both is not None


def corrections(power, levels, refinement=2):
    """Series by level whose variance is h^power exactly, alike in all batches."""
    return {level: Series.of(shape(1) * float(refinement) ** (-power * level / 2)) for level in levels}


@pytest.mark.parametrize("power", [-1.0, 0.5, 1.0, 2.0])
@pytest.mark.parametrize("refinement", [2, 4])
def test_the_slope_is_the_power_of_h(power, refinement):
    """Whatever the refinement: h is divided by it from level to level."""
    found = slope(corrections(power, range(3, 8), refinement), refinement, 0.01)
    assert found.estimate == pytest.approx(power, rel=NEAR)
    assert found.high - found.low < PATHS * EPS


def test_the_order_is_that_of_the_finer_half():
    """Level 0 is no difference; of levels 1 to 10 it is fitted over 6 to 10, whatever the coarser ones do."""
    bent = {**corrections(3.0, range(6)), **corrections(1.0, range(6, 11))}
    found = order(bent, 2, 0.01)
    assert found.levels == (6, 7, 8, 9, 10)
    assert found.slope.estimate == pytest.approx(1.0, rel=NEAR)


def test_levels_whose_tail_is_not_known_are_left_out():
    """A level that few paths carry would bend the slope either way; with fewer than four levels there is no slope."""
    known = corrections(1.0, range(1, 5))
    rare = np.where(np.arange(PATHS) % 256 == 0, shape(2), 0.0)
    assert order({**known, 5: Series.of(rare)}, 2, 0.01).levels == (3, 4)
    short = order({**corrections(1.0, range(4)), 5: Series.of(rare)}, 2, 0.01)
    assert (short.slope, short.levels, short.reason) == (None, (), "too few usable levels")


def test_the_interval_of_the_slope_adds_the_levels_variances():
    """Levels are independent: half of two levels' difference of logarithms, each with its own jackknife error."""
    series = {level: Series.of(shape(1) * uneven(spread)) for level, spread in ((1, 0.1), (2, 0.2))}
    found = slope(series, 2, 0.05)
    errors = [jackknife(np.log(variances(one)), 0.05).se for one in series.values()]
    assert found.se == pytest.approx(math.hypot(*errors) / math.log(2), rel=NEAR)
