"""The finest paying level: leading runs on the ladder, an exact law beyond it, and several quantities."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from judge_cases import audit
from scipy import stats

from narrowgauge.judge.accumulation import LawPoint, fit, signal_decay
from narrowgauge.judge.finest import Beyond, FinestLevel, finest_on_ladder, over_quantities
from narrowgauge.judge.gain import Scheme
from narrowgauge.judge.schemes import ArmJudgement, LevelJudgement

ALPHA = 0.01
SPLIT64 = Scheme(kind="split", narrow="float16", wide="float64")
VERDICTS = {"+": ("pays", None), "-": ("does not pay", "edge"), "?": ("undecided", "budget")}
# Geometric Brownian motion by Euler, r = .05, s = .2, T = 1, payoff S_T, S_0 = 1: the correction walks by 1.5 c a step,
# c = (1/12) int_0^1 E[(ulp(S_t)/u)^2] e^((2r + s^2)(1 - t)) dt = 0.2342088; V_8 from the exact second moments.
WALK = 1.5 * 0.2342088
SIGNAL = 3.59247973021e-6 * 2**8
FINEST = 8
COSTS = {"float64": 1.0, "float32": 0.5, "float16": 0.25, "bfloat16": 0.25}


def judgements(signs, scheme=SPLIT64, name="float16"):
    """Levels 0, 1, 2 ... with one verdict each: + pays, - does not pay, ? undecided."""
    return [
        LevelJudgement(
            level=level,
            arms={
                "value": {
                    name: ArmJudgement(
                        scheme=scheme,
                        gain=None,
                        edge=None,
                        bias=None,
                        verdict=VERDICTS[sign][0],
                        reason=VERDICTS[sign][1],
                        paths_needed=None,
                        admitted_rmse=None,
                    )
                }
            },
            best={"value": scheme},
            joint=scheme,
            views={},
        )
        for level, sign in enumerate(signs)
    ]


def law(u, coefficients=(0.0, WALK, 0.0), *, relative_se=0.0, value=1.0, leave_out=False):
    """The fit of levels that obey Var = u^2 (floor + walk n + drift n^2) exactly."""
    points = [
        LawPoint(
            level=level,
            steps=2**level,
            variance=(size := u**2 * sum(c * 2.0 ** (level * k) for k, c in enumerate(coefficients))),
            se=relative_se * size,
            dof=31.0,
            mean=0.0,
            value_variance=value,
        )
        for level in range(FINEST + 1)
    ]
    return fit(points, u, leave_out_coarsest=leave_out)


def beyond(u, *, relative_se=0.0, signal=SIGNAL, value=math.inf, coefficients=(0.0, WALK, 0.0)):
    """V_l = signal 2^-l and Var R by the law; Var E grows likewise, by two thirds of the walk."""
    signals = [signal * 2.0**-level for level in range(FINEST + 1)]
    return Beyond(
        correction=law(u, coefficients, relative_se=relative_se, leave_out=True),
        error=law(u, tuple(c / 1.5 for c in coefficients)),
        decay=signal_decay(range(FINEST + 1), signals, [relative_se * v for v in signals]),
        value_variance=value,
    )


def found(signs, file, *, scheme=SPLIT64, name="float16", rest=None):
    rest = beyond(2.0**-11) if rest is None else rest
    return finest_on_ladder(judgements(signs, scheme, name), "value", name, file=file, beyond=rest, alpha=ALPHA)


def formats(name="float16", **others):
    return {"narrow": [name], "wide": ["float64"], "schemes": ["split"], **others}


@pytest.mark.parametrize(
    ("signs", "level", "possible", "reason"),
    [
        ("++-+", 1, 1, "edge"),
        ("++?+-", 1, 3, "budget"),
        ("+?-??", 0, 1, "budget"),
        ("?+", None, 1, "budget"),
        ("??-", None, 1, "budget"),
        ("-+", None, None, "edge"),
        ("-", None, None, "edge"),
        ("?", None, 0, "budget"),
        ("+", 0, 0, "one level"),
    ],
)
def test_the_finest_level_ends_the_leading_run_of_paying_ones(signs, level, possible, reason):
    """`level` ends the run of "pays", `possible` that of "not refuted"; the next level gives the reason."""
    got = found(signs, audit(finest=len(signs) - 1, formats=formats()))
    assert (got.level, got.possible, got.reason) == (level, possible, reason)
    assert (got.extrapolated, got.cautious, got.decided_by) == (False, None, None)


@pytest.mark.parametrize(
    "scheme", [Scheme(kind="alone", narrow="float16"), Scheme(kind="split", narrow="float16", wide="float32")]
)
def test_bias_is_not_extrapolated(scheme):
    """Alone, and over a narrower top, the limit is the bias: the last level or finer."""
    got = found("+++", audit(finest=2, formats=formats()), scheme=scheme)
    assert got == FinestLevel(level=2, possible=None, extrapolated=False, reason="or finer, not extrapolated")


@pytest.mark.parametrize("part", ["decay", "correction", "error"])
def test_without_a_law_nothing_is_extrapolated(part):
    """A law or a decay that was not fitted leaves the last level or finer."""
    unfitted = fit([], 1.0)
    rest = replace(beyond(2.0**-11), **{part: None if part == "decay" else unfitted})
    got = found("+++", audit(finest=2, formats=formats()), rest=rest)
    assert (got.level, got.possible, got.extrapolated) == (2, None, False)
    assert got.reason == "or finer, too few levels to extrapolate"


def cost_table(ratio):
    return {"float64": 1.0, "float32": ratio, "float16": ratio, "bfloat16": ratio}


def closed_edge(u, ratio, level, walk=WALK):
    """V / (sqrt((V + r) x) + sqrt(r (1 + x)))^2, V and r on a level by their laws."""
    signal, r = SIGNAL * 2.0**-level, walk * u**2 * 2.0**level
    return signal / (math.sqrt((signal + r) * ratio) + math.sqrt(r * (1 + ratio))) ** 2


@pytest.mark.parametrize(("ratio", "finest"), [(0.5, 17), (0.25, 18)])
def test_float32_pays_up_to_the_level_of_the_closed_form(ratio, finest):
    """An exact law ends where the closed form does: level 17 at half the cost of float64, 18 at a quarter.

    Both figures were computed from first principles, with the exact V_l, apart from this program.
    """
    u = 2.0**-24
    assert closed_edge(u, ratio, finest) > 1 > closed_edge(u, ratio, finest + 1)
    file = audit(finest=FINEST, formats=formats("float32"), cost=cost_table(ratio))
    scheme = Scheme(kind="split", narrow="float32", wide="float64")
    got = found("+" * (FINEST + 1), file, scheme=scheme, name="float32", rest=beyond(u))
    assert (got.level, got.extrapolated, got.reason) == (finest, True, "extrapolated")
    assert got.possible == finest


@pytest.mark.parametrize("ratio", [0.5, 0.25])
def test_the_cautious_end_has_the_walk_and_the_drift_at_their_upper_bounds(ratio):
    """The law is held to be good to 1%, so that a drift that nobody saw is not excluded: level 15, and 16."""
    u = 2.0**-24
    rest = beyond(u)
    law_of = rest.correction
    factor = law_of.walk_high / law_of.walk

    def edge(level):
        n = 2.0**level
        return closed_edge(u, ratio, level, walk=factor * (law_of.walk_without_drift + law_of.drift_high * n))

    wanted = max(level for level in range(9, 40) if edge(level) > 1)
    file = audit(finest=FINEST, formats=formats("float32"), cost=cost_table(ratio))
    scheme = Scheme(kind="split", narrow="float32", wide="float64")
    got = found("+" * (FINEST + 1), file, scheme=scheme, name="float32", rest=rest)
    assert got.cautious == wanted == {0.5: 15, 0.25: 16}[ratio]


def test_where_it_stops_paying_at_once_the_ladder_is_the_end():
    """float16 at half the cost pays up to level 4 by the closed form: nothing is added to a ladder of 8."""
    assert closed_edge(2.0**-11, 0.5, 4) > 1 > closed_edge(2.0**-11, 0.5, 5)
    got = found("+" * (FINEST + 1), audit(finest=FINEST, formats=formats(), cost=cost_table(0.5)))
    assert (got.level, got.possible, got.cautious, got.extrapolated) == (FINEST, FINEST, FINEST, False)


def test_bounds_move_the_end_both_ways():
    """`possible` and `cautious` end where the closed form does with every bound for the format, or against it.

    For it: V_l and the walk at their bounds at 1 - alpha, and an edge of 1.05. Over 60 sizes of errors and costs.
    """
    u, apart = 2.0**-24, set()
    scheme = Scheme(kind="split", narrow="float32", wide="float64")
    for relative_se, ratio in itertools.product((0.01, 0.02, 0.05, 0.1, 0.2, 0.3), np.linspace(0.25, 0.7, 10)):
        rest = beyond(u, relative_se=relative_se)
        fitted, decay = rest.correction, rest.decay
        assert fitted.drift_low == 0

        def last(better, least, *, fitted=fitted, decay=decay, ratio=ratio):
            def edge(level):
                times = 2 ** (better * stats.t.ppf(1 - ALPHA / 2, 31) * decay.log2_se(level))
                walk = fitted.walk_without_drift
                if better > 0:
                    walk *= fitted.walk_low / fitted.walk
                if better < 0:
                    walk = (walk + fitted.drift_high * 2.0**level) * fitted.walk_high / fitted.walk
                return closed_edge(u, ratio, level, walk / times)

            return max(level for level in range(FINEST, 60) if level == FINEST or edge(level) >= least)

        file = audit(finest=FINEST, formats=formats("float32"), cost=cost_table(ratio))
        got = found("+" * 9, file, scheme=scheme, name="float32", rest=rest)
        assert (got.cautious, got.level) == (last(-1, 1), last(0, 1))
        assert got.possible == max(got.level, last(1, 1.05))
        apart.add((got.possible - got.level, got.level - got.cautious))
    assert len(apart) > 3


@pytest.mark.parametrize("drift", [5e-6, 1e-4])
def test_a_drift_brings_the_end_nearer(drift):
    """Var R = u^2 (walk n + drift n^2): the end is the closed form's with both parts."""
    u, coefficients = 2.0**-24, (0.0, WALK, drift)
    file = audit(finest=FINEST, formats=formats("float32"), cost=cost_table(0.5))
    scheme = Scheme(kind="split", narrow="float32", wide="float64")
    rest = beyond(u, coefficients=coefficients)
    significant = rest.correction.drift_low > 0
    got = found("+" * 9, file, scheme=scheme, name="float32", rest=rest)
    wanted = max(k for k in range(9, 40) if closed_edge(u, 0.5, k, WALK + drift * 2.0**k) > 1)
    # On level 8 the smaller one is .4% of the walk, which 1% cannot tell from none: only the cautious end sees it.
    assert significant == (drift == 1e-4)
    assert (got.level if significant else got.cautious) <= wanted < 17
    assert got.level == (wanted if significant else 17)


def test_the_search_ends_where_the_error_is_a_tenth_of_the_variance():
    """Var E = walk / 1.5 u^2 2^l passes a tenth of Var P between levels 12 and 13, whatever the edge."""
    u = 2.0**-24
    value = 10 * WALK / 1.5 * u**2 * 2**12.5
    file = audit(finest=FINEST, formats=formats("float32"), cost=cost_table(0.5))
    scheme = Scheme(kind="split", narrow="float32", wide="float64")
    got = found("+" * 9, file, scheme=scheme, name="float32", rest=beyond(u, value=value))
    assert (got.level, got.possible, got.cautious, got.extrapolated) == (12, 12, 12, True)
    assert got.reason == "extrapolated to where the error is a tenth of the variance"


def test_the_search_ends_forty_levels_beyond():
    """A correction of almost nothing would pay for ever."""
    file = audit(finest=FINEST, formats=formats("float32"))
    scheme = Scheme(kind="split", narrow="float32", wide="float64")
    rest = beyond(2.0**-24, coefficients=(0.0, 1e-30, 0.0))
    got = found("+" * 9, file, scheme=scheme, name="float32", rest=rest)
    assert (got.level, got.possible, got.extrapolated) == (FINEST + 40, FINEST + 40, True)


@pytest.mark.parametrize(
    ("asked", "rival"),
    [
        ({"wide": ["float32", "float64"], "schemes": ["alone", "split"]}, "alone"),
        ({"wide": ["float64"], "today": "float32"}, "alone"),
        ({"wide": ["float32", "float64"]}, "split"),
        ({"wide": ["float64"], "schemes": ["alone", "split"]}, None),
        ({"wide": ["float16", "float64"], "schemes": ["alone", "split"]}, None),
    ],
)
def test_beyond_the_ladder_float16_competes_with_the_same_rivals_as_on_it(asked, rival):
    """Against float32 alone, in `wide` or today's, and split, whose noise is (u_32 / u_16)^2 of its own.

    The signal is large, so that all of it happens beyond level 8.
    """
    u, signal, ratio = 2.0**-11, SIGNAL * 2.0**16, 0.25

    def edge(level):
        v, r = signal * 2.0**-level, WALK * u**2 * 2.0**level
        own = (math.sqrt((v + r) * 0.25) + math.sqrt(r * 1.25)) ** 2
        r32 = r * 2.0**-26
        split32 = (math.sqrt((v + r32) * 0.5) + math.sqrt(r32 * 1.5)) ** 2
        return {"alone": v * 0.5, "split": min(v, split32), None: v}[rival] / own

    wanted = max(level for level in range(9, 40) if edge(level) > 1)
    file = audit(finest=FINEST, formats=formats(**asked), cost=cost_table(ratio) | {"float32": 0.5})
    got = found("+" * 9, file, rest=beyond(u, signal=signal))
    assert got.level == wanted > FINEST


@pytest.mark.parametrize("signal", [SIGNAL * 2.0**k for k in range(20, 24)])
def test_a_split_rival_of_near_precision_has_an_eighth_squared_of_the_noise(signal):
    """bfloat16 at 1/4 against a split of float16 at 1/2, whose unit roundoff is an eighth: Var R is a 64th."""
    u = 2.0**-8

    def edge(level):
        v, r = signal * 2.0**-level, WALK * u**2 * 2.0**level
        own, rival = (
            (math.sqrt((v + one) * cost) + math.sqrt(one * (1 + cost))) ** 2 for one, cost in ((r, 0.25), (r / 64, 0.5))
        )
        return min(v, rival) / own

    wanted = max(level for level in range(FINEST, 40) if level == FINEST or edge(level) > 1)
    file = audit(
        finest=FINEST, formats=formats("bfloat16", wide=["float16", "float64"]), cost={**COSTS, "float16": 0.5}
    )
    scheme = Scheme(kind="split", narrow="bfloat16", wide="float64")
    got = found("+" * 9, file, scheme=scheme, name="bfloat16", rest=beyond(u, signal=signal))
    assert got.level == wanted > FINEST


def one(level, possible, reason="edge", *, cautious=None, extrapolated=False):
    return FinestLevel(level=level, possible=possible, extrapolated=extrapolated, reason=reason, cautious=cautious)


OPEN, FEW = "or finer, not extrapolated", "or finer, too few levels to extrapolate"


@pytest.mark.parametrize(
    ("a", "b", "level", "possible", "decided_by"),
    [
        (one(3, 5), one(2, 6), 2, 5, "b"),
        (one(2, 6), one(3, 5), 2, 5, "a"),
        (one(None, None), one(3, 5), None, None, "a"),
        (one(3, 5), one(None, 1), None, 1, "b"),
        (one(0, 0), one(None, None), None, None, "b"),
        (one(None, 2), one(None, None), None, None, "b"),  # equal levels: the smaller `possible`
        (one(3, 5), one(3, 4), 3, 4, "b"),
        (one(3, 4), one(3, 4, "budget"), 3, 4, "a"),
        (one(3, None, OPEN), one(3, 3), 3, 3, "b"),  # 3 or finer, but the other one ends at 3
        (one(3, 3), one(3, None, OPEN), 3, 3, "a"),
        (one(3, None, OPEN), one(2, 6), 2, 6, "b"),
        (one(3, None, FEW), one(2, 6), 2, 6, "b"),
        (one(3, None, FEW), one(3, None, OPEN), 3, None, "a"),
    ],
)
def test_the_worst_quantity_decides(a, b, level, possible, decided_by):
    """The smallest level decides, None being none at all; `possible` is the smallest that sets a limit."""
    worst = over_quantities({"a": a, "b": b})
    assert (worst.level, worst.possible, worst.decided_by) == (level, possible, decided_by)
    assert worst.reason == {"a": a, "b": b}[decided_by].reason


def test_the_least_certain_extrapolation_is_the_cautious_one():
    """Extrapolated to 10 and to 11: the second may end at 6 already, and so may both."""
    a = one(10, 12, "extrapolated", cautious=9, extrapolated=True)
    b = one(11, 14, "extrapolated", cautious=6, extrapolated=True)
    worst = over_quantities({"a": a, "b": b})
    assert (worst.level, worst.possible, worst.cautious, worst.extrapolated) == (10, 12, 6, True)
    measured = over_quantities({"a": a, "b": one(4, 5)})
    assert (measured.level, measured.possible, measured.cautious, measured.extrapolated) == (4, 5, None, False)


def test_nothing_is_extrapolated_from_approximate_draws():
    """A split over float64 that pays on all levels is followed beyond the ladder with exact draws alone.

    The law of rounding says nothing about the others, even where one is at hand.
    """
    file = audit(finest=FINEST, formats=formats(), cost=COSTS, draws={"approximate": "linear"})
    name = "float16/approximate"
    cheap = found("+" * (FINEST + 1), file, scheme=replace(SPLIT64, narrow=name), name=name)
    assert (cheap.level, cheap.extrapolated, cheap.reason) == (FINEST, False, "or finer, not extrapolated")
    assert found("+" * (FINEST + 1), file).reason.startswith("extrapolat")
