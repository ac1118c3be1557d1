"""Yes/no payoffs: bounds of a cost ratio from counted events, by brute force, exhaustively, and by simulation.

Simulations draw level differences and corrections in {-1, 0, 1} directly; they have a fixed seed, state their
false-alarm rate, and hold a negative control.
"""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from judge_cases import COSTS, NEAR, counted, quantity, shape, view
from scipy import stats

from narrowgauge.judge.gain import FEW_EVENTS, Scheme
from narrowgauge.judge.intervals import jackknife, means, variances
from narrowgauge.measure.moments import BATCHES, Moments, Series
from narrowgauge.measure.tally import QuantityTally

ALPHA = 0.01
REFERENCE = Scheme(kind="alone", narrow="float64")
ALONE16 = Scheme(kind="alone", narrow="float16")
ALONE32 = Scheme(kind="alone", narrow="float32")
SPLIT16 = Scheme(kind="split", narrow="float16", wide="float64")
SPLIT16_32 = Scheme(kind="split", narrow="float16", wide="float32")
SPLIT32 = Scheme(kind="split", narrow="float32", wide="float64")
ARMS = ("float64", "float16", "float32")


def yes_no(paths, *, level_events, events, coarse=True):
    """Payoffs of 0 and 1, spread evenly: D is 1 on `level_events` paths; float16 turns 0 into 1 on `events` others."""
    reference = np.zeros(paths)
    reference[np.arange(level_events) * paths // level_events] = 1.0
    narrow = reference.copy()
    free = np.flatnonzero(reference == 0.0)
    narrow[free[np.arange(events) * free.size // max(events, 1)]] = 1.0
    return quantity({"float64": reference, "float16": narrow}, coarse=coarse)


def bound(events, paths, alpha):
    return math.log(1 / alpha) / paths if events == 0 else stats.beta.ppf(1 - alpha, events + 1, paths - events)


def log_interval(series, alpha, extra=0.0):
    """Both ends of a variance's one-sided jackknife bounds at 1 - alpha."""
    found = jackknife(np.log(variances(series, extra)), 2 * alpha)
    return math.exp(found.low), math.exp(found.high)


def test_counts_make_the_same_series_as_paths():
    """The series made from counts for the simulations is that of the paths themselves."""
    counts = np.random.default_rng(1).multinomial(64, [0.1, 0.7, 0.2], size=BATCHES)
    values = (-1.0, 0.0, 1.0)
    wanted = Series.of(np.concatenate([np.repeat(values, row) for row in counts]))
    found = counted(values, counts)
    assert (found.events, found.largest, found.smallest) == (wanted.events, wanted.largest, wanted.smallest)
    assert (found.distinct, found.nonfinite, found.counted) == (wanted.distinct, 0, True)
    for name in ("count", "mean", "m2", "m3", "m4"):
        assert getattr(found.moments, name) == pytest.approx(getattr(wanted.moments, name), abs=NEAR)


@pytest.mark.parametrize("coarse", [False, True])
@pytest.mark.parametrize("own", [ALONE16, SPLIT16])
@pytest.mark.parametrize(("paths", "level_events"), [(1024, 5), (4096, 400), (2**16, 2**14)])
def test_bounds_hold_the_estimate_and_widen_with_every_event(own, coarse, paths, level_events):
    """For every count below 20: 0 <= low <= estimate <= high, and each further event lowers the lower bound.

    Each further correction lowers the estimate too where the signal is large; at 20 the jackknife takes over.
    """
    found = [
        view(yes_no(paths, level_events=level_events, events=events, coarse=coarse)).ratio(own, REFERENCE, ALPHA)
        for events in range(FEW_EVENTS)
    ]
    assert all(0 <= one.low <= one.estimate <= one.high for one in found)
    assert all(after.low <= before.low for before, after in itertools.pairwise(found))
    if own == SPLIT16 and level_events >= FEW_EVENTS:
        assert all(after.estimate < before.estimate for before, after in itertools.pairwise(found))
        assert found[-1].high < found[0].high


def test_corrections_never_seen_on_few_paths_never_pay():
    """No event in 1,024 paths proves nothing for a fine level's split, though its estimate is the ratio of costs."""
    for level_events in (1, 5, 19, 20, 60):
        looked = view(yes_no(1024, level_events=level_events, events=0))
        found = looked.ratio(SPLIT16, REFERENCE, ALPHA)
        assert found.estimate == pytest.approx(4.0, rel=NEAR)
        assert found.low < 1 < found.high
        # Negative control: to the sample variances the split is four times as cheap, for certain.
        if level_events > 1:
            plain = jackknife(looked.logarithm(REFERENCE) - looked.logarithm(SPLIT16), ALPHA).exponential()
            assert plain.low > 1


@pytest.mark.parametrize(("coarse", "level_events"), [(True, 2**15), (False, 2**19)])
def test_corrections_never_seen_on_very_many_paths_pay(coarse, level_events):
    """float32 without an event in 2^20 paths pays, on a level whose D is rare and on level 0, and does so alone too."""
    looked = view(yes_no(2**20, level_events=level_events, events=0, coarse=coarse))
    for own in (SPLIT16, ALONE16):
        assert looked.ratio(own, REFERENCE, ALPHA).low > 1


def test_level_0_of_a_yes_no_payoff_is_not_blurred_by_its_mean():
    """P is 1 on half of 2^15 paths: with no event the variances differ by at most w^2 q, w = 2, q = ln(1/a) / N.

    Three bounds share alpha / 2: V on both sides, and q.
    """
    paths = 2**15
    tally = yes_no(paths, level_events=paths // 2, events=0, coarse=False)
    found = view(tally).ratio(ALONE16, REFERENCE, ALPHA)
    each = ALPHA / 2 / 3
    v = log_interval(tally.differences["float64"], each)[0]
    assert found.low == pytest.approx(4 * v / (v + 4 * bound(0, paths, each)), rel=NEAR)
    assert found.low > 3.9


def random_joint(rng, paths, cells):
    """Level differences of three arms from cells of (D, R of float16, R of float32, paths), in random order."""
    table = np.repeat([cell[:3] for cell in cells], [cell[3] for cell in cells], axis=0)
    rest = np.zeros((paths - len(table), 3))
    d, r16, r32 = rng.permutation(np.concatenate([table, rest])).T
    return quantity({"float64": d, "float16": d - r16, "float32": d - r32}, fine=_ones(paths), coarse=True)


def _ones(paths):
    return {name: np.arange(paths) % 2.0 for name in ARMS}


@pytest.mark.parametrize("rare", [0, 3])
def test_bounds_of_two_splits_are_those_of_a_brute_force_search(rare):
    """The bounds equal, within the grid, the worst over 20,001 values of V of bounds put together apart.

    float16 has many events: Var D of it follows V by the jackknife of their ratio; float32 has few: within w^2 q.
    Six bounds share alpha / 2: V on both sides, two of narrow arms, two of corrections.
    """
    paths = 2**14
    cells = [(1.0, 0.0, 0.0, 900), (-1.0, 0.0, 0.0, 700), (0.0, 1.0, 0.0, 60), (1.0, 1.0, 0.0, 40)]
    tally = random_joint(np.random.default_rng(2), paths, [*cells, (0.0, 0.0, -1.0, rare)])
    found = view(tally).ratio(SPLIT16_32, SPLIT32, ALPHA)
    each = ALPHA / 2 / 6
    reference, own = tally.differences["float64"], tally.differences["float16"]
    ends = log_interval(reference, each)[0], log_interval(reference, each, 4.0)[1]
    both = [np.log(variances(own, extra)) - np.log(variances(reference)) for extra in (0.0, 4.0)]
    follows = [math.exp(jackknife(both[0], 2 * each).low), math.exp(jackknife(both[1], 2 * each).high)]
    r16 = tally.corrections["float16", "float32"]
    r16_ends = log_interval(r16, each)[0], log_interval(r16, each, 4.0)[1]
    low_q, high_q = (stats.beta.ppf(each, rare, paths - rare + 1) if rare else 0.0), bound(rare, paths, each)
    r32_ends = low_q * (1 - low_q), 4 * high_q
    v = np.geomspace(*ends, 20_001)

    def own_cost(k):
        return np.sqrt(follows[k] * v * 0.25) + math.sqrt(r16_ends[k] * 0.75)

    def rival_cost(k):
        around = np.maximum(v + (-1, 1)[k] * 4 * high_q, 0)
        return np.sqrt(around * 0.5) + math.sqrt(r32_ends[k] * 1.5)

    step = math.log(ends[1] / ends[0]) / 20_000
    assert found.low == pytest.approx(((rival_cost(0) / own_cost(1)) ** 2).min(), rel=2 * step)
    assert found.high == pytest.approx(((rival_cost(1) / own_cost(0)) ** 2).max(), rel=2 * step)


@pytest.mark.parametrize("paths", [2**12, 2**16])
def test_the_cut_of_a_root_inside_the_interval_of_v_is_found(paths):
    """Few level differences, a rival with few corrections: the worst V may lie inside; 200,001 values agree."""
    cells = [(1.0, 0.0, 0.0, 6), (0.0, 1.0, 0.0, 2), (0.0, 0.0, 1.0, 1)]
    tally = random_joint(np.random.default_rng(3), paths, cells)
    found = view(tally).ratio(SPLIT16, SPLIT32, ALPHA)
    each = ALPHA / 2 / 6
    low = stats.beta.ppf(each, 6, paths - 5)
    v = np.geomspace(low * (1 - low), 4 * bound(6, paths, each), 200_001)

    def cost(sign, events, narrow):
        q, p = bound(events, paths, each), stats.beta.ppf(each, events, paths - events + 1)
        r = p * (1 - p) if sign < 0 else 4 * q
        return np.sqrt(np.maximum(v + sign * 4 * q, 0) * narrow) + math.sqrt(r * (narrow + 1))

    step = math.log(v[-1] / v[0]) / 200_000
    lows = (cost(-1, 1, 0.5) / cost(1, 2, 0.25)) ** 2
    highs = (cost(1, 1, 0.5) / cost(-1, 2, 0.25)) ** 2
    assert found.low == pytest.approx(lows.min(), rel=2 * step)
    assert found.high == pytest.approx(highs.max(), rel=2 * step)
    assert max(highs[0], highs[-1]) < 0.9 * highs.max()


def test_the_largest_correction_is_the_declared_one_twice_on_a_level_with_a_coarse_path():
    """|R| <= 2 r where |P^wide - P^narrow| <= r, r on level 0; undeclared it is twice the range of P and 0."""
    share = bound(2, 4096, ALPHA)
    for coarse, declared, largest in ((True, None, 2.0), (False, None, 2.0), (True, 0.75, 1.5), (False, 1.5, 1.5)):
        tally = yes_no(4096, level_events=900, events=2, coarse=coarse)
        found = view(tally, largest_correction=declared).bias("float16", ALPHA)
        assert (found.low, found.high) == pytest.approx((-largest * share, largest * share), rel=NEAR)
        assert found.estimate == pytest.approx(2 / 4096, rel=NEAR)


def test_a_declared_bound_that_was_exceeded_gives_way_to_the_correction_seen():
    """A correction of 1 was seen, so that a declared bound of .1 is no bound."""
    tally = yes_no(4096, level_events=900, events=2, coarse=True)
    found = view(tally, largest_correction=0.1).bias("float16", ALPHA)
    assert found.high == pytest.approx(bound(2, 4096, ALPHA), rel=NEAR)


@pytest.mark.parametrize(("declared", "events", "r"), [(0.25, 0, 0.25), (0.25, 2, 1.0), (1.5, 2, 1.5)])
def test_a_declared_bound_narrows_how_far_variances_lie_apart(declared, events, r):
    """|V^a - V| <= w min(w, 2 r) q, w = 2: with r of 1/4 as declared, with the 1 that was seen, and w from 1 on."""
    tally = yes_no(4096, level_events=1024, events=events, coarse=False)
    found = view(tally, largest_correction=declared).ratio(ALONE16, REFERENCE, ALPHA)
    each = ALPHA / 2 / 3
    v = log_interval(tally.differences["float64"], each)[0]
    slack = 2 * min(2, 2 * r) * bound(events, 4096, each)
    assert found.low == pytest.approx(4 * v / (v + slack), rel=NEAR)


def test_level_differences_larger_than_the_payoff_widen_its_range():
    """P is 0 or 1 on the fine path, D is 3: the coarse path reached further, and R may be twice 3."""
    arms = dict.fromkeys(("float64", "float16"), np.tile([3.0, 0.0, 0.0, 0.0], 1024))
    fine = dict.fromkeys(arms, np.tile([1.0, 0.0], 2048))
    found = view(quantity(arms, fine=fine, coarse=True)).bias("float16", ALPHA)
    assert found.high == pytest.approx(6 * bound(0, 4096, ALPHA), rel=NEAR)


def test_many_corrections_in_one_batch_are_bounded_by_the_largest():
    """Without that batch there is no Var R and the jackknife knows nothing; it is below r_max^2 = 4 all the same."""
    reference = np.zeros(4096)
    reference[::900] = 1.0
    narrow = reference.copy()
    narrow[1:26] = 1.0
    tally = quantity({"float64": reference, "float16": narrow}, coarse=True)
    found = view(tally).ratio(SPLIT16, REFERENCE, ALPHA)
    each = ALPHA / 2 / 4
    p = stats.beta.ppf(each, 5, 4096 - 4)
    dear = math.sqrt(4 * 0.25) + math.sqrt(4 * 1.25)  # Var D^float16 has the same bound
    assert found.low == pytest.approx(p * (1 - p) / dear**2, rel=NEAR)


def test_a_declared_bound_of_corrections_does_not_bound_the_level_difference():
    """Var D with 3 events of 4,096 is bounded by the payoff's range, whatever is declared for R."""
    tally = yes_no(4096, level_events=3, events=0, coarse=True)
    loose, tight = (view(tally, largest_correction=r).ratio(SPLIT16, REFERENCE, ALPHA) for r in (None, 1e-9))
    assert tight.low > loose.low
    assert tight.high == pytest.approx(4.0, rel=1e-3)  # V^a = V as far as 1e-9 goes, and no correction


def test_a_payoff_of_minus_one_and_one_has_corrections_up_to_four():
    """Range 2: fine and coarse path may each move by 2, so that |R| <= 4 and not twice the largest |P|."""
    arms = dict.fromkeys(("float64", "float16"), np.tile([1.0, -1.0, 0.0, 0.0], 1024))
    fine = dict.fromkeys(arms, np.tile([1.0, -1.0], 2048))
    found = view(quantity(arms, fine=fine, coarse=True)).bias("float16", ALPHA)
    assert found.high == pytest.approx(4 * bound(0, 4096, ALPHA), rel=NEAR)


def test_from_20_events_on_bias_is_the_jackknifes():
    """19 events are bounded by r_max p_upper, 20 by the t interval of -R; a continuous R always by the latter."""
    few, enough = (view(yes_no(4096, level_events=900, events=k)) for k in (19, 20))
    assert few.bias("float16", ALPHA).high == pytest.approx(2 * bound(19, 4096, ALPHA), rel=NEAR)
    wanted = jackknife(-means(enough.tally.corrections["float16", "float64"]), ALPHA)
    assert enough.bias("float16", ALPHA) == wanted


def test_a_narrow_arm_that_few_signals_survive_is_counted_too():
    """D^float16 has 5 events where D^ref has 300: its own variance is bounded, 1 p (1 - p) to 4 p_upper."""
    reference = np.zeros(4096)
    reference[:: 4096 // 256] = 1.0
    narrow = np.where(np.arange(4096) < 5 * 16, reference, 0.0)
    tally = quantity({"float64": reference, "float16": narrow}, coarse=True)
    found = view(tally).ratio(ALONE16, REFERENCE, ALPHA)
    each = ALPHA / 2 / 3
    p = stats.beta.ppf(each, 5, 4096 - 4)
    ends = log_interval(tally.differences["float64"], each)[0], log_interval(tally.differences["float64"], each, 4)[1]
    assert found.low == pytest.approx(4 * ends[0] / (4 * bound(5, 4096, each)), rel=NEAR)
    assert found.high == pytest.approx(4 * ends[1] / (p * (1 - p)), rel=1e-3)


def test_a_continuous_correction_beside_a_counted_level_difference_is_not_taken_for_none():
    """D^ref is 1 on 5 paths, float16 adds noise to every path: its variance has its own jackknife bounds."""
    reference = np.zeros(4096)
    reference[::900] = 1.0
    tally = quantity({"float64": reference, "float16": reference + 0.1 * shape(1)}, coarse=True)
    found = view(tally).ratio(ALONE16, REFERENCE, ALPHA)
    each = ALPHA / 2 / 3
    p, own = stats.beta.ppf(each, 5, 4096 - 4), tally.differences["float16"]
    highest = log_interval(own, each, 4 * own.largest**2)[1]
    assert found.low == pytest.approx(4 * p * (1 - p) / highest, rel=NEAR)
    assert found.high == pytest.approx(4 * (2 * own.largest) ** 2 * bound(5, 4096, each) / log_interval(own, each)[0])
    assert found.low < found.estimate < found.high


CASES = {
    # cells (D, R of float16, R of float32): expected number of paths out of N; own scheme and rival
    "few corrections": (
        {(1, 0, 0): 1600, (-1, 0, 0): 1600, (0, 1, 0): 0.8, (0, -1, 0): 0.5, (1, 1, 0): 0.2},
        SPLIT16,
        REFERENCE,
    ),
    "alone, large corrections": (
        {(1, 0, 0): 40, (-1, 0, 0): 40, (1, 2, 0): 1.5, (0, -1, 0): 1.5, (-1, -1, 0): 1},
        ALONE16,
        REFERENCE,
    ),
    "few differences": ({(1, 0, 0): 5, (-1, 0, 0): 3, (0, 1, 0): 0.7, (1, 1, 0): 0.6}, SPLIT16, REFERENCE),
    "many against few": (
        {(1, 0, 0): 1600, (-1, 0, 0): 1500, (0, 1, 0): 100, (1, 1, 0): 60, (0, 0, 1): 1.5, (0, 1, 1): 0.5},
        SPLIT16_32,
        ALONE32,
    ),
    "two splits": (
        {(1, 0, 0): 30, (-1, 0, 0): 25, (0, 1, 0): 4, (0, 0, -1): 1.5, (1, 1, 1): 0.5},
        SPLIT16_32,
        SPLIT32,
    ),
}
SAMPLES, SIMULATED, SIMULATED_ALPHA = 400, 2**14, 0.1


def variance(values, chances):
    return chances @ values**2 - (chances @ values) ** 2


def true_ratio(own, rival, table, chances):
    """The cost ratio of two schemes from exact variances."""
    d = {"float64": table[:, 0], "float16": table[:, 0] - table[:, 1], "float32": table[:, 0] - table[:, 2]}

    def s(scheme):
        low = math.sqrt(variance(d[scheme.narrow], chances) * COSTS.step(scheme.narrow))
        if scheme.wide is None:
            return low
        r = variance(d[scheme.wide] - d[scheme.narrow], chances)
        return low + math.sqrt(r * (COSTS.step(scheme.narrow) + COSTS.step(scheme.wide)))

    return (s(rival) / s(own)) ** 2


def sampled(table, counts):
    """The tally of one sample of counts (batches, cells); P is 0 or 1."""
    d = {"float64": table[:, 0], "float16": table[:, 0] - table[:, 1], "float32": table[:, 0] - table[:, 2]}
    differences = {name: counted(values, counts) for name, values in d.items()}
    pairs = (("float16", "float64"), ("float16", "float32"), ("float32", "float64"))
    paid = counted((0.0, 1.0), np.full((BATCHES, 2), SIMULATED // BATCHES // 2))
    return QuantityTally(
        values=dict.fromkeys(ARMS, paid),
        errors={},
        differences=differences,
        corrections={(a, b): counted(d[b] - d[a], counts) for a, b in pairs},
        coarse=Moments.of(np.zeros(BATCHES)),
    )


@pytest.mark.parametrize("case", CASES)
def test_counted_bounds_hold_as_often_as_they_say(case):
    """Each bound misses the true ratio in at most as many of 400 samples as 5% do with probability 1 - 1e-4.

    Negative control, where the own corrections are rare: the plain jackknife of the same samples puts its lower
    bound above the truth more often than that. False-alarm rate 1e-4 for each of ten bounds.
    """
    cells, own, rival = CASES[case]
    table = np.array([(0, 0, 0), *cells], dtype=np.float64)
    chances = np.array([SIMULATED - sum(cells.values()), *cells.values()]) / SIMULATED
    truth = true_ratio(own, rival, table, chances)
    rng = np.random.default_rng([4, list(CASES).index(case)])
    draws = rng.multinomial(SIMULATED // BATCHES, chances, size=(SAMPLES, BATCHES))
    above = below = plain = judged = 0
    for counts in draws:
        looked = view(sampled(table, counts))
        # A level without any difference is not judged at all.
        if looked.tally.differences["float64"].events == 0 or looked.tally.differences[own.narrow].events == 0:
            continue
        judged += 1
        found = looked.ratio(own, rival, SIMULATED_ALPHA)
        above += found.low > truth
        below += found.high < truth
        with np.errstate(invalid="ignore"):
            logarithms = looked.logarithm(rival) - looked.logarithm(own)
        plain += jackknife(logarithms, SIMULATED_ALPHA).exponential().low > truth
    allowed = stats.binom.ppf(1 - 1e-4, judged, SIMULATED_ALPHA / 2)
    assert judged > 0.9 * SAMPLES
    assert above <= allowed
    assert below <= allowed
    if case in ("few corrections", "few differences"):
        assert plain > allowed
