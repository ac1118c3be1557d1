"""Costs, the break-even ratio, and ratios of costs where the sample variance decides, against closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from judge_cases import COSTS, EPS, NEAR, PATHS, differences, quantity, shape, uneven, view

from narrowgauge.judge.gain import LevelCosts, LevelView, Scheme, breakeven
from narrowgauge.judge.intervals import jackknife, means
from narrowgauge.kernel.auditfile import CostTable

ALPHA = 0.01
REFERENCE = Scheme(kind="alone", narrow="float64")
ALONE16 = Scheme(kind="alone", narrow="float16")
ALONE32 = Scheme(kind="alone", narrow="float32")
SPLIT16 = Scheme(kind="split", narrow="float16", wide="float64")
SPLIT16_32 = Scheme(kind="split", narrow="float16", wide="float32")
POSITIVE = st.floats(1e-12, 1e12)


def split_cost(signal, noise, narrow, wide):
    """S^2 of a split of independent D and R: (sqrt((V + r) C_a) + sqrt(r (C_a + C_b)))^2."""
    return (math.sqrt((signal + noise) * narrow) + math.sqrt(noise * (narrow + wide))) ** 2


def test_schemes_name_their_arms():
    """A split's top is its wide arm, alone it is the arm itself; both read as a sentence does."""
    assert (SPLIT16_32.top, SPLIT16_32.arms) == ("float32", ("float16", "float32"))
    assert str(SPLIT16_32) == "float16 + correction to float32"
    assert (ALONE16.top, ALONE16.arms, str(ALONE16)) == ("float16", ("float16",), "float16 alone")


def test_a_path_costs_its_steps_its_draws_and_its_fixed_part():
    """Level 3: 8 fine + 4 coarse steps; 8 x 2 draws at .1 and 5 a path are paid once, in a correction too."""
    table = CostTable(float64=1.0, float32=0.5, float16=0.25, draws=0.1, path=5.0)
    costs = LevelCosts(steps=12, draws=16, table=table)
    assert costs.path("float64") == pytest.approx(12 * 1 + 16 * 0.1 + 5, rel=4 * EPS)
    assert costs.path("float16") == pytest.approx(12 * 0.25 + 16 * 0.1 + 5, rel=4 * EPS)
    assert costs.correction("float16", "float32") == pytest.approx(12 * 0.75 + 16 * 0.1 + 5, rel=4 * EPS)


def test_approximate_draws_have_a_cost_of_their_own():
    """Paid once by a path, and once beside the exact ones in a correction that takes both kinds; the formats' steps."""
    table = CostTable(float64=1.0, float32=0.5, float16=0.25, draws=0.1, approximate_draws=0.01, path=5.0)
    costs = LevelCosts(steps=12, draws=16, table=table)
    assert costs.path("float16/approximate") == pytest.approx(12 * 0.25 + 16 * 0.01 + 5, rel=4 * EPS)
    assert costs.path("float16") == pytest.approx(12 * 0.25 + 16 * 0.1 + 5, rel=4 * EPS)
    both = costs.correction("float16/approximate", "float32")
    assert both == pytest.approx(12 * 0.75 + 16 * 0.11 + 5, rel=4 * EPS)
    assert costs.correction("float32/approximate", "float32") == pytest.approx(12 + 16 * 0.11 + 5, rel=4 * EPS)


def test_approximate_draws_cost_as_much_as_exact_ones_unless_said():
    """A table made without their cost."""
    costs = LevelCosts(steps=1, draws=10, table=CostTable(float64=1.0, float16=0.25, draws=0.1))
    assert costs.path("float16/approximate") == costs.path("float16")


def test_a_tenth_of_the_cost_and_a_thousandth_of_the_variance_save_a_factor_of_eight():
    """(sqrt(.1) + sqrt(.001 x 1.1))^-2 = 8.2; a factor of about 8 is common practice, no source."""
    sine, cosine = math.sqrt(0.001) / 2, math.sqrt(1 - 0.001 / 4)
    even, odd = cosine * shape(0), sine * shape(1)
    table = CostTable(float64=1.0, float32=0.5, float16=0.1)
    saved = view(quantity({"float64": even + odd, "float16": even - odd}), table).ratio(SPLIT16, REFERENCE, ALPHA)
    assert saved.estimate == pytest.approx((math.sqrt(0.1) + math.sqrt(0.001 * 1.1)) ** -2, rel=NEAR)
    assert round(saved.estimate, 1) == 8.2


@given(POSITIVE, POSITIVE, st.floats(1e-9, 1 - 1e-9))
def test_breakeven_is_where_both_sides_cost_the_same(narrow, wide, share):
    """sqrt(V_narrow x) + sqrt(Var R (1 + x)) = sqrt(V_wide) at x, and is larger for any larger x.

    The bound: a dozen roundings, and 1 - Var R / V_wide as far as the quotient is rounded.
    """
    correction = share * wide
    x = breakeven(narrow, wide, correction)

    def left(ratio):
        return math.sqrt(narrow * ratio) + math.sqrt(correction * (1 + ratio))

    near = 16 * EPS / (1 - share)
    assert left(x) == pytest.approx(math.sqrt(wide), rel=near)
    assert left(x * (1 + 1e-3)) > left(x) > left(x * (1 - 1e-3))


@given(POSITIVE, POSITIVE)
def test_breakeven_at_its_limits(narrow, wide):
    """0 where Var R >= V_wide; V_wide / V_narrow without R, also as the limit of a vanishing one."""
    assert breakeven(narrow, wide, wide) == breakeven(narrow, wide, 2 * wide) == 0.0
    assert breakeven(narrow, wide, 0.0) == pytest.approx(wide / narrow, rel=8 * EPS)
    # To first order sqrt(x) falls by sqrt(Var R (1 + x) / V_narrow), here by a share of 1e-15.
    tiny = 1e-30 * wide / (1 + wide / narrow)
    assert breakeven(narrow, wide, tiny) == pytest.approx(wide / narrow, rel=2e-15 + 16 * EPS)
    assert breakeven(0.0, wide, wide / 4) == pytest.approx(3.0, rel=8 * EPS)
    assert breakeven(0.0, wide, 0.0) == math.inf


def test_breakeven_is_where_the_ratio_of_costs_crosses_one():
    """A cost table at the break-even ratio makes both schemes cost the same."""
    tally = quantity(differences(1.0, float16=0.05))
    x = breakeven(1.05, 1.0, 0.05)
    for factor, sign in ((1 - 1e-6, 1), (1 + 1e-6, -1)):
        table = CostTable(float64=3.0, float16=3.0 * x * factor)
        assert math.copysign(1, math.log(view(tally, table).ratio(SPLIT16, REFERENCE, ALPHA).estimate)) == sign


def test_logarithms_are_those_of_the_closed_forms():
    """log S^2 of alone and split from V, Var R and costs; the same without any one of equal batches."""
    looked = view(quantity(differences(2.0, float16=0.03, float32=0.001)))
    for scheme, wanted in (
        (REFERENCE, 2.0),
        (ALONE16, 2.03 / 4),
        (SPLIT16, split_cost(2.0, 0.03, 0.25, 1.0)),
        # R from float16 to float32 is the difference of two independent errors.
        (SPLIT16_32, (math.sqrt(2.03 * 0.25) + math.sqrt(0.031 * 0.75)) ** 2),
    ):
        logarithm = looked.logarithm(scheme)
        assert logarithm[0] == pytest.approx(math.log(wanted), abs=NEAR)
        assert np.ptp(logarithm[1:]) <= NEAR
    assert looked.correction(REFERENCE) is None
    assert looked.correction(ALONE16) is looked.correction(SPLIT16)


def test_the_lower_bound_adds_four_corrections_of_the_largest_size_seen():
    """With equal batches nothing else moves it; the upper bound stays at the estimate."""
    looked = view(quantity(differences(1.0, float16=0.01)))
    n, largest = PATHS, looked.correction(SPLIT16).largest
    added = 4 * largest**2 / (n - 1)
    assert added > 1e3 * NEAR
    for own, estimate, lowest in (
        (SPLIT16, split_cost(1, 0.01, 0.25, 1), (math.sqrt(1.01 / 4) + math.sqrt((0.01 + added) * 1.25)) ** 2),
        (ALONE16, 1.01 / 4, (1.01 + added) / 4),
    ):
        found = looked.ratio(own, REFERENCE, ALPHA)
        assert found.estimate == pytest.approx(1 / estimate, rel=NEAR)
        assert found.high == pytest.approx(1 / estimate, rel=NEAR)
        assert found.low == pytest.approx(1 / lowest, rel=NEAR)


def test_the_interval_of_a_ratio_is_the_jackknife_of_its_logarithm():
    """Uneven batches: the upper bound is exp of the jackknife's, leaving out batch by batch with np.var."""
    arms = differences(1.0, float16=0.01)
    arms["float16"] = arms["float64"] - (arms["float64"] - arms["float16"]) * uneven(0.3)
    found = view(quantity(arms)).ratio(SPLIT16, REFERENCE, ALPHA)

    def log_ratio(kept):
        wide, narrow = arms["float64"][kept], arms["float16"][kept]
        r = math.sqrt(np.var(wide - narrow, ddof=1) * 1.25)
        return math.log(np.var(wide, ddof=1)) - 2 * math.log(math.sqrt(np.var(narrow, ddof=1) / 4) + r)

    batch = np.arange(PATHS) // (PATHS // 32)
    wanted = jackknife(np.array([log_ratio(batch >= 0), *(log_ratio(batch != k) for k in range(32))]), ALPHA)
    near = NEAR / wanted.se
    assert found.high == pytest.approx(math.exp(wanted.high), rel=near)
    assert found.low < math.exp(wanted.low) < math.exp(wanted.high)


def test_a_scheme_costs_as_much_as_itself():
    """The ratio of a scheme to itself is 1 and known to be 1, few events or not."""
    for tally in (quantity(differences(1.0, float16=0.5)), quantity(dict.fromkeys(("float64", "float16"), shape(0)))):
        found = view(tally).ratio(SPLIT16, SPLIT16, ALPHA)
        assert (found.estimate, found.low, found.high, found.se) == (1.0, 1.0, 1.0, 0.0)


def test_bias_is_the_mean_of_the_narrow_arm_less_the_reference():
    """Signed, with the t interval of -R; the reference has none, and none to be known."""
    arms = differences(1.0, float16=0.01)
    arms["float16"] = arms["float16"] + 0.25 * uneven(0.1)
    looked = view(quantity(arms))
    found = looked.bias("float16", ALPHA)
    wanted = jackknife(-means(looked.tally.corrections["float16", "float64"]), ALPHA)
    assert found == wanted
    assert found.estimate == pytest.approx(0.25, rel=NEAR)
    # Batch means alternate between 1.1 and .9 times .25.
    assert found.se == pytest.approx(0.025 / math.sqrt(31), rel=NEAR)
    none = looked.bias("float64", ALPHA)
    assert (none.estimate, none.low, none.high, none.se) == (0.0, 0.0, 0.0, 0.0)


def test_steps_and_fixed_costs_enter_the_ratio():
    """Draws and a fixed part cost every arm the same and narrow the gain: 12 steps, 16 draws at .5, 5 a path."""
    table = CostTable(float64=1.0, float16=0.25, draws=0.5, path=5.0)
    looked = LevelView(
        quantity(differences(1.0, float16=0.01)), LevelCosts(steps=12, draws=16, table=table), largest_correction=None
    )
    wanted = 25 / (math.sqrt(1.01 * 16) + math.sqrt(0.01 * 28)) ** 2
    assert looked.ratio(SPLIT16, REFERENCE, ALPHA).estimate == pytest.approx(wanted, rel=NEAR)
    assert wanted < view(looked.tally, COSTS).ratio(SPLIT16, REFERENCE, ALPHA).estimate
