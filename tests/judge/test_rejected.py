"""A law that the chi-square test rejects is said to fit badly, and nothing is extrapolated from it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from judge_cases import audit
from scipy import stats
from test_finest import FINEST, WALK, beyond, closed_edge, cost_table, formats, found

from narrowgauge.judge.accumulation import AccumulationFit, LawPoint, fit, rejected, sentence
from narrowgauge.judge.finest import over_quantities
from narrowgauge.judge.gain import Scheme

U = 2.0**-24
SPLIT32 = Scheme(kind="split", narrow="float32", wide="float64")
LADDER = [(level, 2**level) for level in range(FINEST + 1)]


def bent(size, coefficients=(0.0, WALK, 0.0)):
    """The fit of levels that obey the law but for a factor 1 + size on odd levels and 1 - size on even ones."""
    points = [
        LawPoint(
            level=level,
            steps=n,
            variance=U**2 * sum(c * n**k for k, c in enumerate(coefficients)) * (1 + size * (-1) ** (level + 1)),
            se=0.0,
            dof=31.0,
            mean=0.0,
            value_variance=1.0,
        )
        for level, n in LADDER
    ]
    return fit(points, U, leave_out_coarsest=True)


def extrapolated(rest):
    file = audit(finest=FINEST, formats=formats("float32"), cost=cost_table(0.5))
    return found("+" * (FINEST + 1), file, scheme=SPLIT32, name="float32", rest=rest)


@pytest.mark.parametrize("part", ["correction", "error"])
def test_nothing_is_extrapolated_from_a_rejected_law(part):
    """Levels that lie 12% off the law, where 1% is allowed: the finest measured level or finer, without bounds."""
    law = bent(0.12)
    assert law.fit_p < 1e-9
    assert law.deviation > 11
    got = extrapolated(replace(beyond(U), **{part: law}))
    assert (got.level, got.cautious, got.possible, got.extrapolated) == (FINEST, None, None, False)
    assert got.reason == "or finer, the law does not fit"
    # Such a level sets no limit to another quantity that ends there.
    other = replace(got, possible=FINEST, reason="edge")
    assert over_quantities({"a": got, "b": other}).decided_by == "b"


def test_negative_control_a_law_that_holds_is_extrapolated():
    """Levels within the 1% that the law is good to are not rejected."""
    law = bent(0.01)
    assert law.fit_p > 0.1
    assert extrapolated(replace(beyond(U), correction=law)).extrapolated


@pytest.mark.parametrize(("p", "bad"), [(0.0011, False), (0.001, False), (0.00099, True), (0.0, True), (None, False)])
def test_the_law_is_rejected_below_one_in_a_thousand(p, bad):
    """The threshold is a p of .001; a law without a p is not rejected."""
    assert rejected(AccumulationFit(fit_p=p)) is bad


def test_laws_that_hold_are_rarely_rejected():
    """Of 2,000 fits to levels with exactly the error they claim, no more are rejected than .1% are.

    Each level is off by a normal error of se = 3%, beside the 1% of the law. Binomial, false-alarm rate 1e-6. Negative
    control: with errors half as large as they are, far more are rejected.
    """
    rng = np.random.default_rng(6)
    counts = {1.0: 0, 2.0: 0}
    for _ in range(2000):
        noise = rng.standard_normal(FINEST + 1)
        for times in counts:
            points = [
                LawPoint(
                    level=level,
                    steps=n,
                    variance=(size := U**2 * WALK * n) * (1 + 0.03 * times * z),
                    se=0.03 * size,
                    dof=31.0,
                    mean=0.0,
                    value_variance=1.0,
                )
                for (level, n), z in zip(LADDER, noise, strict=True)
            ]
            counts[times] += rejected(fit(points, U))
    allowed = stats.binom.isf(1e-6, 2000, 0.001)
    assert counts[1.0] <= allowed < counts[2.0]


def test_the_sentence_says_that_the_law_fits_badly():
    """It names the ruling part all the same, and p; a p past float64 is below 1e-300."""
    law = bent(0.12)
    words = "float32: the walk of step roundings (delta^2/h) rules on every level"
    assert sentence(replace(law, fit_p=1.8e-14), "float32", LADDER) == f"{words}; the law fits badly (p = 1.8e-14)."
    assert sentence(replace(law, fit_p=0.0), "float32", LADDER) == f"{words}; the law fits badly (p < 1e-300)."
    assert sentence(replace(law, fit_p=0.001), "float32", LADDER) == f"{words}."
    several = bent(0.12, (3.0 * WALK, WALK, 0.0))
    said = sentence(several, "a16", LADDER)
    assert said.endswith(f"(delta^2/h) from level 2 on; the law fits badly (p = {several.fit_p:.1e}).")


def test_the_largest_deviation_widens_both_ends():
    """A law that is not rejected but lies d off on some level: Var R between fit / (1 + d) and fit / (1 - d).

    The walk lies outside the interval of the free fit, so that its own bounds leave no doubt on one side.
    """
    for deviation in (0.0, 5.0, 20.0, 60.0, 99.0, 150.0):
        rest = beyond(U)
        law = replace(rest.correction, deviation=deviation, walk_low=rest.correction.walk, drift_high=0.0)
        law = replace(law, walk_high=law.walk)
        got = extrapolated(replace(rest, correction=law))
        d = deviation / 100
        times = {"cautious": 1 / (1 - d) if d < 1 else 1 + d, "possible": 1 / (1 + d)}
        walk = law.walk_without_drift

        def last(factor, least, walk=walk):
            return max(k for k in range(FINEST, 60) if closed_edge(U, 0.5, k, walk * factor) >= least)

        assert got.level == last(1.0, 1.0) == 17
        assert got.cautious == last(times["cautious"], 1.0)
        assert got.possible == max(17, last(times["possible"], 1.05))
    assert got.cautious < 17
