"""Verdicts, row by row of their truth table, and admissibility."""

from __future__ import annotations

import math

import numpy as np
import pytest
from judge_cases import NEAR, PATHS, audit, differences, level_tally, quantity, shape, uneven
from scipy import optimize, stats

from narrowgauge.judge.asked import budget_levels
from narrowgauge.judge.gain import Scheme
from narrowgauge.judge.schemes import judge_level

ALPHA = 0.01
SPLIT_ONLY = {"narrow": ["float16"], "wide": ["float64"], "schemes": ["split"]}
ALONE_ONLY = {"narrow": ["float16"], "wide": ["float64"], "schemes": ["alone"]}
BOTH = {"narrow": ["float16", "float32"], "wide": ["float32", "float64"]}


def alone(name):
    return Scheme(kind="alone", narrow=name)


def split(name, wide):
    return Scheme(kind="split", narrow=name, wide=wide)


def judged(tally, file, *, quantity="value", name="float16"):
    return judge_level(tally, file, ALPHA).arms[quantity][name]


def said(tally, file, **which):
    one = judged(tally, file, **which)
    return one.verdict, one.reason


def split_edge(noise, cost=0.25):
    return (math.sqrt((1 + noise) * cost) + math.sqrt(noise * (1 + cost))) ** -2


def noise_of(edge):
    """Var R at which a split of float16 over float64 has this edge at V = 1."""
    return optimize.brentq(lambda noise: split_edge(noise) - edge, 1e-9, 1)


def noisy(noise, spread=0.0):
    """V = 1 and R of the variance given over all batches, which differs between even and odd ones."""
    arms = differences(1.0)
    r = math.sqrt(noise / (1 + spread**2)) * shape(1) * uneven(spread)
    return level_tally(quantity(arms | {"float16": arms["float64"] - r}))


def shifted(*biases, spread=0.0):
    """Quantities of variance 1 whose float16 is shifted by a bias that differs between even and odd batches."""
    arms = differences(1.0)
    return level_tally(
        {
            f"q{number}": quantity(arms | {"float16": arms["float64"] + bias * uneven(spread)})
            for number, bias in enumerate(biases)
        }
    )


def giants(noise, size, name="float16", spread=0.0, **others):
    """R of the arm is small noise everywhere, but about `size` on one path of each batch: carried by 32 paths."""
    arms = differences(1.0, **others)
    r = math.sqrt(noise) * shape(3)
    r[:: PATHS // 32] = size
    return level_tally(quantity(arms | {name: arms["float64"] - r * uneven(spread)}))


def test_low_above_one_pays():
    """The edge over float64 alone, at R of a thousandth, is that of the closed form, and it pays."""
    found = judged(noisy(0.001), audit(formats=SPLIT_ONLY))
    assert (found.verdict, found.reason, found.paths_needed) == ("pays", None, None)
    assert found.scheme == split("float16", "float64")
    assert found.edge.estimate == found.gain.estimate == pytest.approx(split_edge(0.001), rel=NEAR)
    assert found.edge.low > 1


def test_high_below_worthwhile_does_not_pay():
    """Where Var R is V the split costs more than float64 alone; so does an edge of .99, and one of 1.03 at 1.05."""
    file = audit(formats=SPLIT_ONLY)
    assert said(noisy(1.0), file) == ("does not pay", "edge")
    assert said(noisy(noise_of(0.99)), file) == ("does not pay", "edge")


def test_an_edge_that_is_small_but_certain_pays():
    """low > 1 comes first: an edge of 1.03 known to be above 1 pays, though it is below worthwhile."""
    found = judged(noisy(noise_of(1.03)), audit(formats=SPLIT_ONLY))
    assert 1 < found.edge.low < found.edge.high < 1.05
    assert (found.verdict, found.reason) == ("pays", None)


def test_a_wide_interval_is_undecided_for_want_of_paths():
    """Bounds on both sides of 1 and 1.05: undecided, and told how many paths take a bound to its limit.

    A bound comes nearer by 1 / sqrt(paths): the smaller of the two squares of distance over margin decides.
    """
    for edge in (1.02, 1.2, 0.97):
        found = judged(noisy(noise_of(edge), spread=0.9), audit(formats=SPLIT_ONLY))
        assert (found.verdict, found.reason) == ("undecided", "budget")
        low, estimate, high = (math.log(x) for x in (found.edge.low, found.edge.estimate, found.edge.high))
        factors = []
        if estimate > 0:
            factors.append(((estimate - low) / estimate) ** 2)
        if estimate < math.log(1.05):
            factors.append(((high - estimate) / (math.log(1.05) - estimate)) ** 2)
        assert found.paths_needed == pytest.approx(PATHS * min(factors), abs=1 + PATHS * NEAR / abs(estimate))
        assert found.paths_needed > PATHS


def test_worthwhile_is_the_targets():
    """An edge of 1.2 at most does not pay if 1.5 is asked for; the file's default leaves it undecided."""
    tally = noisy(noise_of(1.2), spread=0.9)
    asked = audit(formats=SPLIT_ONLY, target={"rmse": 1e9, "worthwhile": 3.0})
    assert said(tally, asked) == ("does not pay", "edge")
    assert said(tally, audit(formats=SPLIT_ONLY)) == ("undecided", "budget")


def test_no_scheme_of_its_own_does_not_pay():
    """A split needs a wider format: float32 has none where float32 is the only wide one."""
    file = audit(formats={"narrow": ["float32"], "wide": ["float32"], "schemes": ["split"]})
    tally = level_tally(quantity(differences(1.0, float32=1e-6)))
    found = judged(tally, file, name="float32")
    assert (found.verdict, found.reason, found.scheme, found.bias) == ("does not pay", "edge", None, None)


@pytest.mark.parametrize(("sign", "number"), [(1, 0), (-1, 1)])
@pytest.mark.parametrize(
    ("size", "spread", "verdict"),
    [(0.05, 0.1, ("pays", None)), (0.2, 0.1, ("does not pay", "bias")), (0.08, 0.9, ("undecided", "bias"))],
)
def test_a_bias_of_one_quantity_decides_for_both(sign, number, size, spread, verdict):
    """The share is .25 x 1.6 / 4 levels = .1: inside, outside and straddling it, on either side, for one of two."""
    biases = [0.0, 0.0]
    biases[number] = sign * size
    file = audit(finest=3, formats=ALONE_ONLY, target={"rmse": 1.6})
    tally = shifted(*biases, spread=spread)
    for name in ("q0", "q1"):
        assert said(tally, file, quantity=name) == verdict
    found = judged(tally, file, quantity=f"q{number}")
    assert found.scheme == alone("float16")
    assert found.bias.estimate == pytest.approx(sign * size, rel=NEAR)
    half = stats.t.ppf(1 - ALPHA / 2, 31) * size * spread / math.sqrt(31)
    assert found.bias.half_width == pytest.approx(half, rel=NEAR / spread)
    if verdict[0] == "undecided":
        # The half-width shrinks like 1 / sqrt(paths); .02 of the share are left.
        assert found.paths_needed == math.ceil(PATHS * (half / 0.02) ** 2)
    assert found.admitted_rmse is None


def test_the_share_of_the_bias_is_by_quantity_and_by_level():
    """A target by quantity judges each bias by its own; levels that are not added up share nothing."""
    tally = shifted(0.2, 0.002)
    for rmse, verdict in (({"q0": 4.0, "q1": 0.04}, "pays"), ({"q0": 4.0, "q1": 0.02}, "does not pay")):
        file = audit(finest=3, formats=ALONE_ONLY, target={"rmse": rmse})
        assert said(tally, file, quantity="q0")[0] == verdict
    kernel = {"coupling": "none"}
    apart = audit(finest=3, kernel=kernel, formats=ALONE_ONLY, target={"rmse": {"q0": 1.0, "q1": 0.01}})
    assert (budget_levels(apart), budget_levels(audit(finest=3))) == (1, 4)
    assert said(tally, apart, quantity="q0") == ("pays", None)


def test_without_a_target_a_scheme_carries_the_error_that_its_bias_admits():
    """Bias is not judged; rmse = largest |bound| x levels / .25, 0 under a float64 top."""
    tally = shifted(-0.08, spread=0.9)
    found = judged(tally, audit(finest=3, formats=ALONE_ONLY), quantity="q0")
    assert found.verdict == "pays"
    assert found.admitted_rmse == pytest.approx(-found.bias.low * 4 / 0.25, rel=NEAR)
    assert judged(noisy(0.001), audit(finest=3, formats=SPLIT_ONLY)).admitted_rmse == 0.0


def test_a_refuted_edge_does_not_wait_for_an_admission():
    """Any scheme that is not refused may be refuted: bias straddling its share, but no edge."""
    arms = differences(1.0)
    arms["float16"] = 3 * arms["float64"] + 0.08 * uneven(0.9)
    file = audit(finest=3, formats=ALONE_ONLY, target={"rmse": 1.6})
    assert said(level_tally(quantity(arms)), file) == ("does not pay", "edge")


@pytest.mark.parametrize("place", ["values", "differences"])
def test_nothing_non_finite_is_admitted(place):
    """One infinite value in the arm, fine or in the difference, refuses all of its schemes for every quantity."""
    arms = differences(1.0, float16=0.001, float32=1e-9)
    broken = arms["float16"].copy()
    broken[7] = math.inf
    bad = quantity(arms | {"float16": broken}, fine=arms) if place == "differences" else None
    bad = bad or quantity(arms, fine=arms | {"float16": broken})
    file = audit(formats=BOTH)
    judgement = judge_level(level_tally({"good": quantity(arms), "bad": bad}), file, ALPHA)
    for name in ("good", "bad"):
        found = judgement.arms[name]["float16"]
        assert (found.verdict, found.reason) == ("does not pay", "nonfinite")
        assert (found.scheme, found.gain, found.edge, found.bias) == (None, None, None, None)
        assert judgement.arms[name]["float32"].verdict == "pays"


def test_what_an_arm_raised_refuses_its_schemes_only():
    """float32 raised: its own schemes and the split over it are refused, the split of float16 over float64 pays."""
    arms = differences(1.0, float16=0.001)
    file = audit(formats=BOTH)
    judgement = judge_level(level_tally(quantity(arms), raised=["float32"]), file, ALPHA)
    assert (judgement.arms["value"]["float32"].verdict, judgement.arms["value"]["float32"].reason) == (
        "does not pay",
        "raised",
    )
    found = judgement.arms["value"]["float16"]
    assert (found.verdict, found.edge.estimate) == ("pays", pytest.approx(4 / 1.001, rel=NEAR))


@pytest.mark.parametrize("still", [("float64", "float16"), ("float16",)])
def test_nothing_that_varies_cannot_be_compared(still):
    """No variance, in all arms or in the narrow one alone: does not pay, without figures."""
    arms = differences(1.0, float16=0.001) | dict.fromkeys(still, np.full(PATHS, 2.0))
    found = judged(level_tally(quantity(arms)), audit(formats=SPLIT_ONLY))
    assert (found.verdict, found.reason, found.edge) == ("does not pay", "no_variance", None)


@pytest.mark.parametrize(("values", "verdict"), [((0.0, 1.0), "undecided"), (None, "does not pay")])
def test_a_difference_not_seen_yet_is_not_a_difference_of_zero(values, verdict):
    """A yes/no quantity that varies while fine and coarse path always agree: more paths; a smooth one: no variance."""
    never = dict.fromkeys(("float64", "float16"), np.zeros(PATHS))
    value = np.resize(values, PATHS) if values else np.linspace(0.0, 1.0, PATHS)
    found = judged(level_tally(quantity(never, fine=dict.fromkeys(never, value))), audit(formats=SPLIT_ONLY))
    assert (found.verdict, found.reason) == (verdict, "budget" if values else "no_variance")


@pytest.mark.parametrize("scale", [1e160, 1e300, 1e-200])
def test_a_variance_out_of_range_cannot_be_compared_either(scale):
    """Values whose squares leave float64, above or below, are finite and have no usable variance."""
    arms = {name: scale * values for name, values in differences(1.0, float16=0.001).items()}
    for target in ({}, {"target": {"rmse": 1.0}}):
        found = judged(level_tally(quantity(arms)), audit(formats=SPLIT_ONLY, **target))
        assert (found.verdict, found.reason, found.edge) == ("does not pay", "no_variance", None)


@pytest.mark.parametrize("size", [0.1, 10.0])
def test_a_correction_carried_by_few_paths_is_undecided(size):
    """n_eff is 32 of the 50 needed: neither pays, however large the edge, nor is refuted, however small it is.

    n_eff grows like the paths. Negative control: noise of the same variance in every path is decided.
    """
    tally = giants(1e-8, size)
    found = judged(tally, audit(formats=SPLIT_ONLY))
    risk = tally.quantities["value"].corrections["float16", "float64"]
    assert risk.effective_size == pytest.approx(32, rel=0.01)  # the noise adds 4,096 x 1e-8 to 32 x .1^2
    assert found.edge.low > 1 or found.edge.high < 1
    assert (found.verdict, found.reason) == ("undecided", "kurtosis")
    assert found.paths_needed == math.ceil(PATHS * 50 / risk.effective_size)
    assert said(noisy(risk.moments.variance), audit(formats=SPLIT_ONLY))[0] != "undecided"


def test_an_unknown_tail_is_not_hidden_by_an_unknown_bias():
    """Both are open and the edge looks refuted: a sample that does not know its tail refutes nothing."""
    tally = giants(1e-8, 30.0, spread=0.1)
    risk = tally.quantities["value"].corrections["float16", "float64"]
    found = judged(tally, audit(formats=ALONE_ONLY, target={"rmse": 4 * abs(risk.moments.average)}))
    assert found.edge.high < 1.05
    assert (found.verdict, found.reason) == ("undecided", "bias")


def test_a_yes_no_correction_is_counted_whatever_its_kurtosis():
    """1 on 30 paths of 4,096 has n_eff 30 below 50, but is counted: no verdict hangs on a tail."""
    arms = differences(1.0)
    flips = np.zeros(PATHS)
    flips[:: PATHS // 30] = 0.01
    tally = level_tally(quantity(arms | {"float16": arms["float64"] - flips}))
    assert tally.quantities["value"].corrections["float16", "float64"].effective_size < 50
    assert said(tally, audit(formats=SPLIT_ONLY)) == ("pays", None)


def test_the_bias_of_a_split_rests_on_the_tail_of_its_top():
    """Over float32 with giant errors: with a target its bias is unknown, and the split is; without, it pays."""
    tally = giants(1e-12, 1e-4, "float32", float16=1e-4)
    formats = {"narrow": ["float16"], "wide": ["float32"], "schemes": ["split"]}
    assert tally.quantities["value"].corrections["float16", "float32"].effective_size > 1000
    assert said(tally, audit(formats=formats)) == ("pays", None)
    assert said(tally, audit(formats=formats, target={"rmse": 1.0})) == ("undecided", "kurtosis")


def test_the_best_own_scheme_counts_at_its_share_of_alpha():
    """Three schemes of float16: the edge is the largest of the smallest ratios, each at alpha / 3."""
    arms = differences(1.0, float32=1e-8)
    tally = level_tally(quantity(arms | {"float16": arms["float64"] - 0.1 * shape(3) * uneven(0.3)}))
    file = audit(formats=BOTH | {"narrow": ["float16"]})
    judgement = judge_level(tally, file, ALPHA)
    found, looked = judgement.arms["value"]["float16"], judgement.views["value"]
    rivals = [alone("float64"), alone("float32"), split("float32", "float64")]
    assert found.scheme == alone("float16")
    ratios = [looked.ratio(found.scheme, rival, ALPHA / 3) for rival in rivals]
    assert found.edge.low == min(one.low for one in ratios)
    assert found.edge.high == min(one.high for one in ratios)
    assert found.edge.estimate == pytest.approx(0.5 * (1 + 1e-8) / ((1 + 0.01 * 1.09) / 4), rel=NEAR)
    assert found.gain == looked.ratio(found.scheme, alone("float64"), ALPHA)


def test_a_scheme_known_to_be_admissible_counts_before_a_better_one_that_is_not():
    """Alone is biased beyond its share and has the larger edge; the split over float64 is what pays."""
    arms = differences(1.0, float16=0.001)
    arms["float16"] = arms["float16"] + 0.08 * uneven(0.9)
    file = audit(finest=3, formats=SPLIT_ONLY | {"schemes": ["alone", "split"]}, target={"rmse": 1.6})
    found = judged(level_tally(quantity(arms)), file)
    assert (found.verdict, found.scheme) == ("pays", split("float16", "float64"))


def test_a_rival_that_may_not_be_admissible_refutes_nothing():
    """float16 beats float64 (4/3) and not float32 (2/3), whose bias straddles the share: float16 waits for it.

    Negative control: where float32 is known to be admissible float16 does not pay, where it is not float16 pays.
    """
    arms = differences(1.0, float16=2.0)
    file = audit(formats=BOTH | {"narrow": ["float16"], "schemes": ["alone"]}, target={"rmse": 0.4})
    for bias, wanted in ((0.08, ("undecided", "bias")), (0.01, ("does not pay", "edge")), (0.8, ("pays", None))):
        tally = level_tally(quantity(arms | {"float32": arms["float64"] + bias * uneven(0.9)}))
        assert said(tally, file) == wanted


def test_todays_format_is_judged_for_its_bias_as_a_scheme_of_its_own():
    """float32 is today's and a rival as it is; to be said to pay it must shift the mean by less than its share."""
    arms = differences(1.0)
    tally = level_tally(quantity(arms | {"float32": arms["float64"] + 1.0}))
    formats = {"narrow": ["float32"], "wide": ["float64"], "schemes": ["alone"], "today": "float32"}
    assert said(tally, audit(formats=formats, target={"rmse": 0.4}), name="float32") == ("does not pay", "bias")
    assert said(tally, audit(formats=formats), name="float32") == ("pays", None)
