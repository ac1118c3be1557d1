"""The total saving: brute force over batches, bounds where events are few, and how often those hold.

Simulations draw level differences and corrections in {-1, 0, 1} directly; they have a fixed seed, state their
false-alarm rate, and hold a negative control.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from judge_cases import COSTS, NEAR, PATHS, counted, differences, quantity, shape, uneven, view
from scipy import stats

from narrowgauge.judge.gain import LevelView, Scheme
from narrowgauge.judge.saving import saving
from narrowgauge.kernel.auditfile import CostTable
from narrowgauge.measure.moments import BATCHES, Moments
from narrowgauge.measure.tally import QuantityTally

ALPHA = 0.01
REFERENCE = Scheme(kind="alone", narrow="float64")
ALONE16 = Scheme(kind="alone", narrow="float16")
SPLIT16 = Scheme(kind="split", narrow="float16", wide="float64")


def test_saving_is_the_square_of_the_ratio_of_sums():
    """(sum S of the rival / sum S of the plan)^2 over two levels; equal batches leave no doubt about what was seen."""
    views = {
        0: view(quantity(differences(1.0, float16=0.001))),
        1: view(quantity(differences(0.25, float16=0.002)), steps=3),
    }
    found = saving(views, dict.fromkeys(views, SPLIT16), REFERENCE, ALPHA)
    theirs = 1 + math.sqrt(0.25 * 3)
    ours = math.sqrt(1.001 * 0.25) + math.sqrt(0.001 * 1.25) + math.sqrt(0.252 * 0.75) + math.sqrt(0.002 * 3.75)
    for figure in (found.estimate, found.high):
        assert figure == pytest.approx((theirs / ours) ** 2, rel=2 * NEAR)
    # The lower bound adds four corrections of the largest size seen to each sum of squares.
    more = 1 + 4 * shape(1).max() ** 2 / (PATHS - 1)
    ours = math.sqrt(1.001 * 0.25) + math.sqrt(0.001 * more * 1.25)
    ours += math.sqrt(0.252 * 0.75) + math.sqrt(0.002 * more * 3.75)
    assert found.low == pytest.approx((theirs / ours) ** 2, rel=2 * NEAR)
    assert found.low < found.estimate
    same = saving(views, dict.fromkeys(views, REFERENCE), REFERENCE, ALPHA)
    assert (same.estimate, same.low, same.high) == (1.0, 1.0, 1.0)


def test_the_interval_of_the_saving_is_brute_force_over_batches_of_one_level_at_a_time():
    """Two levels of different noise: np.var without each batch of one level, the other whole; Satterthwaite's dof."""
    arms = {}
    for level, spread in ((0, 0.2), (1, 0.4)):
        d = 2.0**-level * shape(0) * uneven(spread / 2)
        arms[level] = {"float64": d, "float16": d - 0.05 * shape(1) * uneven(spread)}
    steps, batch = {0: 1, 1: 3}, np.arange(PATHS) // (PATHS // 32)
    views = {level: view(quantity(one), steps=steps[level]) for level, one in arms.items()}
    schemes = {0: SPLIT16, 1: Scheme(kind="alone", narrow="float16")}

    def figure(left_level, left_batch, unseen=0):
        theirs = ours = 0.0
        for level, one in arms.items():
            kept = (batch != left_batch) | (level != left_level)
            wide, narrow = (np.var(one[name][kept], ddof=1) * steps[level] for name in ("float64", "float16"))
            theirs += math.sqrt(wide)
            r = one["float64"] - one["float16"]
            more = unseen * (r**2).max() / (kept.sum() - 1)
            ours += math.sqrt(narrow / 4 + (level == 1) * more * steps[level] / 4)
            if level == 0:
                ours += math.sqrt((np.var(r[kept], ddof=1) + more) * 1.25)
        return 2 * math.log(theirs / ours)

    def bounds(unseen):
        parts = []
        for level in arms:
            left = np.array([figure(level, k, unseen) for k in range(32)])
            parts.append(31 / 32 * ((left - left.mean()) ** 2).sum())
        dof = sum(parts) ** 2 / sum(part**2 / 31 for part in parts)
        half = stats.t.ppf(1 - ALPHA / 2, dof) * math.sqrt(sum(parts))
        middle = figure(None, None, unseen)
        return middle, middle - half, middle + half, parts

    middle, low, high, parts = bounds(0)
    cautious = bounds(4)[1]
    assert cautious < low
    found = saving(views, schemes, REFERENCE, ALPHA)
    near = NEAR / math.sqrt(sum(parts))
    assert found.estimate == pytest.approx(math.exp(middle), rel=NEAR)
    assert found.se == pytest.approx(math.sqrt(sum(parts)), rel=near)
    assert (found.low, found.high) == pytest.approx((math.exp(cautious), math.exp(high)), rel=near)


def test_nothing_that_varies_saves_nothing():
    """Where neither rival nor plan has any variance there is no ratio."""
    still = {0: view(quantity({"float64": np.ones(PATHS)}), CostTable(float64=1.0))}
    assert saving(still, {0: REFERENCE}, REFERENCE, ALPHA) is None


def digital(paths, *, level_events, events):
    """D is 1 on `level_events` paths of a yes/no payoff, spread evenly; float16 turns 0 into 1 on `events` others."""
    reference = np.zeros(paths)
    reference[np.arange(level_events) * paths // level_events] = 1.0
    narrow = reference.copy()
    narrow[np.flatnonzero(reference == 0.0)[:events]] = 1.0
    return quantity({"float64": reference, "float16": narrow}, coarse=True)


def test_corrections_never_seen_leave_the_saving_as_open_as_they_leave_the_gain():
    """No event on any of three levels: the estimate is the ratio of costs, 4, and the bounds lie far apart.

    The whole is no surer than its parts: at the same alpha its bounds lie among those of the levels' gains.
    """
    views = {level: view(digital(4096, level_events=1024 >> level, events=0)) for level in range(3)}
    schemes = dict.fromkeys(views, SPLIT16)
    found = saving(views, schemes, REFERENCE, ALPHA)
    assert found.estimate == pytest.approx(4.0, rel=NEAR)
    gains = [view.ratio(SPLIT16, REFERENCE, ALPHA / 3) for view in views.values()]
    assert min(one.low for one in gains) <= found.low <= max(one.low for one in gains) < 3
    assert 4 < min(one.high for one in gains) <= found.high <= max(one.high for one in gains)
    more = {level: view(digital(2**17, level_events=2**15 >> level, events=0)) for level in range(3)}
    assert found.low < saving(more, schemes, REFERENCE, ALPHA).low < 4


def test_negative_control_sample_variances_alone_are_certain(monkeypatch):
    """To the sample variances of the same paths the saving is 4.00 for certain, which is what must not be said."""
    views = {level: view(digital(4096, level_events=1024 >> level, events=0)) for level in range(3)}
    monkeypatch.setattr(LevelView, "few", lambda *_: False)
    found = saving(views, dict.fromkeys(views, SPLIT16), REFERENCE, ALPHA)
    assert found.low == pytest.approx(found.high, rel=NEAR)


def test_one_counted_level_alone_has_the_bounds_of_its_gain():
    """Saving and gain of a single level are one figure: solving for the ratio finds what the ratio's own bounds are."""
    for level_events, events in ((5, 0), (5, 3), (400, 0), (400, 7)):
        looked = view(digital(4096, level_events=level_events, events=events))
        for scheme in (SPLIT16, ALONE16):
            found, gain = saving({0: looked}, {0: scheme}, REFERENCE, ALPHA), looked.ratio(scheme, REFERENCE, ALPHA)
            assert (found.estimate, found.low, found.high) == pytest.approx((gain.estimate, gain.low, gain.high))


def test_a_level_that_stays_as_it_is_saves_nothing_and_blurs_little():
    """Where the plan is the rival the ratio is 1 whatever V is; beside a sure level it only weighs in."""
    still = view(digital(4096, level_events=5, events=0))
    same = saving({0: still}, {0: REFERENCE}, REFERENCE, ALPHA)
    assert (same.estimate, same.low, same.high) == pytest.approx((1.0, 1.0, 1.0), rel=NEAR)
    sure = view(quantity(differences(1.0, float16=1e-6)))
    both = saving({0: sure, 1: still}, {0: SPLIT16, 1: REFERENCE}, REFERENCE, ALPHA)
    # S of the sure level is 1 under the rival; that of the other lies within the counted bounds of V, at alpha / 2.
    n, each = 4096, ALPHA / 2 / 2 / 2
    p = stats.beta.ppf(each, 5, n - 4)
    ends = [math.sqrt(p * (1 - p)), math.sqrt(4 * stats.beta.ppf(1 - each, 6, n - 5))]
    half = math.sqrt(1e-6 * 1.25) + math.sqrt(0.25 * (1 + 1e-6))
    more = math.sqrt(1e-6 * (1 + 4 * shape(1).max() ** 2 / (PATHS - 1)) * 1.25) + math.sqrt(0.25 * (1 + 1e-6))
    assert both.low == pytest.approx(((1 + ends[1]) / (more + ends[1])) ** 2)
    assert both.high == pytest.approx(((1 + ends[0]) / (half + ends[0])) ** 2)
    assert 1 < both.low < both.estimate < both.high


def test_the_margin_of_a_counted_level_is_a_brute_force_search():
    """S of the rival less r S of the plan: the least and the largest over 100,001 values of V, for many r."""
    for rival in (REFERENCE, ALONE16):
        bounds = view(digital(2**14, level_events=60, events=4)).bounds(SPLIT16, rival, ALPHA)
        v = np.geomspace(*bounds.v, 100_001)

        def s(side, v=v):
            return np.sqrt(side.cost * np.maximum(side.slope * v + side.offset, 0.0)) + side.rest

        for times in (0.1, 0.5, 0.9, 1.0, 1.3, 2.0, 3.0, 10.0):
            low, high = bounds.margin(times)
            lows = s(bounds.rival[0]) - times * s(bounds.own[1])
            highs = s(bounds.rival[1]) - times * s(bounds.own[0])
            scale = float(np.abs(np.diff(lows)).max() + np.abs(np.diff(highs)).max())  # the grid's own error
            assert low <= lows.min() + NEAR
            assert high >= highs.max() - NEAR
            assert (low, high) == pytest.approx((lows.min(), highs.max()), abs=scale)


LEVELS = (
    # per level: expected number of paths, out of 2^14, with (D, R)
    {(1, 0): 6000, (0, 1): 0.4, (1, -1): 0.2},
    {(1, 0): 900, (-1, 0): 700, (0, 1): 0.3, (-1, -1): 0.2},
    {(1, 0): 80, (-1, 0): 60, (0, 1): 0.3, (0, -1): 0.3},
)
OFTEN = {(1, 0): 500, (-1, 0): 400, (0, 1): 60, (1, 1): 40}  # a level whose corrections are seen
SAMPLES, SIMULATED, SIMULATED_ALPHA = 400, 2**14, 0.1


def spread_of(values, chances):
    return math.sqrt(chances @ values**2 - (chances @ values) ** 2)


def true_saving(levels):
    """(sum of S of float64 alone / sum of S of the split)^2 from exact variances."""
    theirs = ours = 0.0
    narrow, wide = COSTS.step("float16"), COSTS.step("float64")
    for table, chances in levels:
        theirs += spread_of(table[:, 0], chances) * math.sqrt(wide)
        ours += spread_of(table[:, 0] - table[:, 1], chances) * math.sqrt(narrow)
        ours += spread_of(table[:, 1], chances) * math.sqrt(narrow + wide)
    return (theirs / ours) ** 2


def sampled(table, counts):
    """The tally of one sample of counts (batches, cells); P is 0 or 1."""
    d = {"float64": counted(table[:, 0], counts), "float16": counted(table[:, 0] - table[:, 1], counts)}
    paid = counted((0.0, 1.0), np.full((BATCHES, 2), SIMULATED // BATCHES // 2))
    return QuantityTally(
        values=dict.fromkeys(d, paid),
        errors={},
        differences=d,
        corrections={("float16", "float64"): counted(table[:, 1], counts)},
        coarse=Moments.of(np.zeros(BATCHES)),
    )


@pytest.mark.parametrize("cells", [LEVELS, (*LEVELS, OFTEN)], ids=["all counted", "one by the jackknife"])
def test_the_interval_of_the_saving_holds_as_often_as_it_says(cells, monkeypatch):
    """Each bound misses the truth in at most as many of 400 samples as 5% do with probability 1 - 1e-4.

    Negative control: without counting, the lower bound of the same samples is above the truth more often than that.
    False-alarm rate 1e-4 for each of the four bounds.
    """
    levels = []
    for one in cells:
        table = np.array([(0, 0), *one], dtype=np.float64)
        levels.append((table, np.array([SIMULATED - sum(one.values()), *one.values()]) / SIMULATED))
    truth = true_saving(levels)
    rng = np.random.default_rng([5, len(cells)])
    above = below = plain = 0
    schemes = dict.fromkeys(range(len(cells)), SPLIT16)
    for _ in range(SAMPLES):
        views = {
            level: view(sampled(table, rng.multinomial(SIMULATED // BATCHES, chances, size=BATCHES)))
            for level, (table, chances) in enumerate(levels)
        }
        found = saving(views, schemes, REFERENCE, SIMULATED_ALPHA)
        above += found.low > truth
        below += found.high < truth
        with monkeypatch.context() as patch:
            patch.setattr(LevelView, "few", lambda *_: False)
            plain += saving(views, schemes, REFERENCE, SIMULATED_ALPHA).low > truth
    allowed = stats.binom.ppf(1 - 1e-4, SAMPLES, SIMULATED_ALPHA / 2)
    assert above <= allowed
    assert below <= allowed
    assert plain > allowed
