"""A scheme of the verdict at other parameters, row by row of its truth table; what is tried where it is open."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from judge_cases import PATHS, audit, differences, level_tally, quantity, shape, uneven
from test_schemes import ALONE_ONLY, ALPHA, SPLIT_ONLY, alone, noise_of, noisy, shifted, split

from narrowgauge.judge.domain import arm_figures, judge_scheme, tried_scheme, worse
from narrowgauge.judge.schemes import judge_level

SPLIT = split("float16", "float64")


def figures(tally, file, scheme=SPLIT):
    return judge_scheme(tally, judge_level(tally, file, ALPHA), file, ALPHA, scheme)


def said(tally, file, scheme=SPLIT):
    found = figures(tally, file, scheme)
    return found.outcome, found.reason


def test_a_scheme_that_still_pays_passes():
    """Admissible, and the lower bound of the edge above 1."""
    found = figures(noisy(0.001), audit(formats=SPLIT_ONLY))
    assert (found.outcome, found.reason, found.paths_needed) == ("passes", None, None)
    assert found.edge.low > 1
    assert found.bias.estimate == 0.0  # of a float64 top


def test_an_edge_known_to_be_below_one_refuses():
    """It is not enough that it is below what is worthwhile: between 1 and 1.05 nothing is refused."""
    file = audit(formats=SPLIT_ONLY)
    assert said(noisy(noise_of(0.98)), file) == ("refused", "edge")
    asked = audit(formats=SPLIT_ONLY, target={"rmse": 1e9, "worthwhile": 3.0})
    between = noisy(noise_of(1.2), spread=0.9)
    assert judge_level(between, asked, ALPHA).arms["value"]["float16"].verdict == "does not pay"
    assert said(between, asked)[0] == "undecided"


def test_what_the_paths_do_not_tell_is_undecided():
    """Never a pass; and it is said how many paths would tell."""
    found = figures(noisy(noise_of(1.2), spread=0.9), audit(formats=SPLIT_ONLY))
    assert (found.outcome, found.reason) == ("undecided", "budget")
    assert found.paths_needed > 4096


@pytest.mark.parametrize(
    ("size", "spread", "outcome"),
    [(0.05, 0.1, ("passes", None)), (0.2, 0.1, ("refused", "bias")), (0.08, 0.9, ("undecided", "bias"))],
)
def test_a_bias_of_one_quantity_decides_for_both(size, spread, outcome):
    """The share is .25 x 1.6 / 4 levels = .1: inside, outside and straddling it; it is the bias that is told."""
    file = audit(finest=3, formats=ALONE_ONLY, target={"rmse": 1.6})
    tally = shifted(0.0, -size, spread=spread)
    found = figures(tally, file, alone("float16"))
    assert (found.outcome, found.reason) == outcome
    assert found.bias.estimate == pytest.approx(-size)


@pytest.mark.parametrize("trouble", ["nonfinite", "raised"])
def test_overflow_and_exceptions_refuse(trouble):
    """Also where only one of the scheme's arms has them, and the format's figures say how many paths."""
    arms = differences(1.0, float16=1e-6)
    if trouble == "nonfinite":
        arms["float16"][:7] = np.inf
        tally = level_tally(quantity(arms))
    else:
        tally = level_tally(quantity({"float64": arms["float64"]}), raised=["float16"])
    file = audit(formats=SPLIT_ONLY)
    assert said(tally, file) == ("refused", trouble)
    found = arm_figures(tally, judge_level(tally, file, ALPHA), file, "float16")
    assert (found.nonfinite, found.raised) == ((7, False) if trouble == "nonfinite" else (0, True))


def test_the_reference_passes_where_it_is_finite():
    """There is no edge to ask for."""
    assert said(noisy(1.0), audit(formats=SPLIT_ONLY), alone("float64")) == ("passes", None)


def test_where_nothing_varies_nothing_is_known():
    """Costs cannot be compared: neither a pass nor refused."""
    arms = {name: np.zeros(4096) for name in ("float64", "float16")}
    assert said(level_tally(quantity(arms)), audit(formats=SPLIT_ONLY)) == ("undecided", "no_variance")


def test_an_open_verdict_has_the_reference_tried():
    """The scheme of the verdict is tried where it is known to pay at the audited point, else the reference alone."""
    file = audit(formats=SPLIT_ONLY)
    for tally, scheme in ((noisy(0.001), SPLIT), (noisy(noise_of(1.2), spread=0.9), alone("float64"))):
        judged = judge_level(tally, file, ALPHA)
        assert judged.joint == SPLIT
        assert tried_scheme(tally, judged, file, ALPHA) == scheme


def both(one, other):
    """A level of the quantities of two tallies, in this order."""
    return level_tally({f"q{number}": tally.quantities["value"] for number, tally in enumerate((one, other))})


@pytest.mark.parametrize("turned", [False, True])
def test_a_quantity_without_an_edge_is_not_hidden_by_one_that_has_it(turned):
    """Whichever comes first: an edge near 1 of the one says nothing of the other, of which nothing is known."""
    file = audit(formats=SPLIT_ONLY)
    near = noisy(noise_of(1.2), spread=0.9)
    constant = level_tally(quantity({name: np.zeros(PATHS) for name in ("float64", "float16")}))
    assert figures(near, file).edge is not None
    found = figures(both(*((constant, near) if turned else (near, constant))), file)
    assert (found.outcome, found.reason, found.edge) == ("undecided", "no_variance", None)


@pytest.mark.parametrize("place", [0, 1])
def test_an_open_edge_that_nobody_knows_leaves_none(place):
    """For want of paths, too, as of an event that no path has met yet; one that pays has no part in it."""
    file = audit(formats=SPLIT_ONLY)
    tally = both(noisy(noise_of(1.2), spread=0.9), noisy(noise_of(1.2), spread=0.9))
    level = judge_level(tally, file, ALPHA)
    name = f"q{place}"
    unseen = replace(level.arms[name]["float16"], edge=None, paths_needed=None)
    for arm, edge in ((unseen, False), (replace(unseen, verdict="pays", reason=None), True)):
        changed = replace(level, arms={**level.arms, name: {**level.arms[name], "float16": arm}})
        found = judge_scheme(tally, changed, file, ALPHA, SPLIT)
        assert (found.reason, found.edge is not None) == ("budget", edge)


def test_the_worst_quantity_is_told_of_a_format():
    """Its edge is the smallest, its bias the one that takes most of its share."""
    arms = differences(1.0)
    shift = {0: 0.0, 1: 0.03}
    tally = level_tally(
        {
            f"q{n}": quantity(arms | {"float16": arms["float64"] + s - 0.02 * n * shape(1) * uneven(0.1)})
            for n, s in shift.items()
        }
    )
    file = audit(formats=ALONE_ONLY, target={"rmse": {"q0": 1.6, "q1": 1.6}})
    judged = judge_level(tally, file, ALPHA)
    found = arm_figures(tally, judged, file, "float16")
    assert found.edge == min((judged.arms[q]["float16"].edge for q in ("q0", "q1")), key=lambda one: one.low)
    assert found.bias.estimate == pytest.approx(0.03)


def test_worse_is_an_order():
    """Refused is worse than undecided, which is worse than a pass."""
    assert worse("passes", "undecided") == worse("undecided", "passes") == "undecided"
    assert worse("undecided", "refused") == worse("refused", "passes") == "refused"
