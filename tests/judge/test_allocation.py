"""Paths per branch, for one quantity and for several, against the published formula and brute force."""

from __future__ import annotations

import math

import numpy as np
import pytest
from judge_cases import NEAR, PATHS, differences, quantity, view
from scipy import stats

from narrowgauge.judge.allocation import Allocation, LevelPlan, allocate, common_plan
from narrowgauge.judge.gain import FEW_EVENTS, Scheme

ALPHA = 0.01
REFERENCE = Scheme(kind="alone", narrow="float64")
SPLIT16 = Scheme(kind="split", narrow="float16", wide="float64")
HALF = math.sqrt(0.5)  # the bias share at which half of the mean square error is left for the variance


def plans(allocation):
    return [(plan.paths, plan.correction_paths) for plan in allocation.levels]


def test_paths_are_those_of_the_published_formula():
    """V = (1, 1/4, 1/16), C = (1, 2, 4), eps = .1 give 442, 157 and 56 paths.

    N_l = 2 eps^-2 sqrt(V_l / C_l) sum sqrt(V C): "Multilevel Monte Carlo methods", Acta Numerica 24, 2015,
    doi 10.1017/S096249291500001X, with half of the mean square error for the variance.
    """
    views = {level: view(quantity(differences(4.0**-level)), steps=2**level) for level in range(3)}
    found = allocate(views, dict.fromkeys(views, REFERENCE), 0.1, HALF, ALPHA)
    assert plans(found) == [(442, None), (157, None), (56, None)]
    assert [plan.cost for plan in found.levels] == [442, 157 * 2, 56 * 4]
    assert (found.cost, found.rmse) == (442 + 314 + 224, 0.1)
    assert [(plan.level, plan.scheme) for plan in found.levels] == [(level, REFERENCE) for level in range(3)]


def test_both_branches_of_a_split_are_parts_of_one_sum():
    """V^a = 1.01 at cost 1/4 and Var R = .01 at 5/4: N = ceil(S sqrt(V / C) / budget), S over all branches."""
    views = {
        0: view(quantity(differences(1.0, float16=0.01))),
        1: view(quantity(differences(0.25)), steps=3),
    }
    budget = (1 - 0.25**2) * 1e-3**2
    found = allocate(views, {0: SPLIT16, 1: REFERENCE}, 1e-3, 0.25, ALPHA)
    total = math.sqrt(1.01 * 0.25) + math.sqrt(0.01 * 1.25) + math.sqrt(0.25 * 3)
    wanted = [math.ceil(total * math.sqrt(v / c) / budget) for v, c in ((1.01, 0.25), (0.01, 1.25), (0.25, 3.0))]
    assert plans(found) == [(wanted[0], wanted[1]), (wanted[2], None)]
    assert found.levels[0].cost == pytest.approx(wanted[0] * 0.25 + wanted[1] * 1.25, rel=NEAR)
    # What is left of the error is spent: the variance is within one path of the budget.
    spent = 1.01 / wanted[0] + 0.01 / wanted[1] + 0.25 / wanted[2]
    assert budget * (1 - 1 / min(wanted)) <= spent <= budget


def test_no_other_allocation_of_the_same_variance_is_cheaper():
    """Moving paths between the branches at equal variance raises the cost: Lagrange's condition, by brute force."""
    views = {0: view(quantity(differences(1.0, float16=0.01)))}
    found = allocate(views, {0: SPLIT16}, 1e-3, 0.25, ALPHA)
    plan = found.levels[0]
    budget = 1.01 / plan.paths + 0.01 / plan.correction_paths
    for factor in (0.9, 0.99, 1.01, 1.1):
        low = plan.paths * factor
        correction = 0.01 / (budget - 1.01 / low)
        assert low * 0.25 + correction * 1.25 > found.cost


def test_a_correction_with_heavy_tails_has_ten_paths_for_its_kurtosis():
    """R = +-1 on 1/64 of the paths has kurtosis 64: 640 paths, where the formula asks for fewer.

    The low branch, and a level alone, have 32 at least; so has a correction that never differs from 0.
    """
    arms = differences(1.0)
    flips = np.zeros(PATHS)
    flips[::128], flips[64::128] = 1.0, -1.0
    loose = allocate(
        {
            0: view(quantity(arms | {"float16": arms["float64"] - flips})),
            1: view(quantity(arms | {"float16": arms["float64"]})),
            2: view(quantity(arms)),
        },
        {0: SPLIT16, 1: SPLIT16, 2: REFERENCE},
        1e3,
        0.25,
        ALPHA,
    )
    assert plans(loose) == [(32, 640), (32, 32), (32, None)]


def test_records_are_what_they_say():
    """An allocation holds its levels in the order of the schemes."""
    views = {3: view(quantity(differences(1.0))), 1: view(quantity(differences(1.0)))}
    found = allocate(views, {3: REFERENCE, 1: REFERENCE}, 1e3, 0.25, ALPHA)
    expected = [
        LevelPlan(
            level=k,
            scheme=REFERENCE,
            paths=32,
            correction_paths=None,
            cost=32.0,
            bounded=False,
            path_costs=(1.0,),
        )
        for k in (3, 1)
    ]
    assert found == Allocation(rmse=1e3, levels=tuple(expected), cost=64.0)


def yes_no(events, paths=PATHS):
    """P is 1 on half of the paths; float16 takes it away from `events` of them."""
    reference = np.arange(paths) % 2.0
    narrow = reference.copy()
    narrow[1 : 2 * events : 2] = 0.0
    return quantity({"float64": reference, "float16": narrow})


@pytest.mark.parametrize("events", [0, 3])
def test_a_correction_with_too_few_events_is_planned_from_the_upper_bound_of_its_variance(events):
    """Two levels share alpha: Var R <= 4 p_upper, p_upper = ln(2 / alpha) / N without an event, not 32 paths."""
    views = {level: view(yes_no(events)) for level in range(2)}
    found = allocate(views, dict.fromkeys(views, SPLIT16), 1e-3, 0.25, ALPHA)
    share = ALPHA / 2
    p = math.log(1 / share) / PATHS if events == 0 else stats.beta.ppf(1 - share, events + 1, PATHS - events)
    v, r = np.var(np.where(np.arange(PATHS) < 2 * events, 0.0, np.arange(PATHS) % 2), ddof=1), 4 * p
    total = 2 * (math.sqrt(v * 0.25) + math.sqrt(r * 1.25))
    wanted = total * math.sqrt(r / 1.25) / ((1 - 0.25**2) * 1e-3**2)
    for plan in found.levels:
        assert plan.bounded
        assert plan.correction_paths == pytest.approx(wanted, abs=1)
        assert plan.correction_paths > 1000
    # Negative control: by the sample variance, 0 without an event, 32 paths would be enough.
    assert events or views[0].tally.corrections["float16", "float64"].moments.variance == 0.0


def test_enough_events_are_planned_from_their_own_variance():
    """From 20 events on the sample variance is that of the plan, and nothing is marked; nor is a level alone."""
    views = {0: view(yes_no(FEW_EVENTS)), 1: view(yes_no(0))}
    found = allocate(views, {0: SPLIT16, 1: REFERENCE}, 1e-3, 0.25, ALPHA)
    assert [plan.bounded for plan in found.levels] == [False, False]
    low, r = views[0].tally.differences["float16"].moments.variance, np.var(np.arange(PATHS) < FEW_EVENTS, ddof=1)
    plan = found.levels[0]
    wanted = math.sqrt(r / 1.25 / (low / 0.25))
    assert plan.correction_paths / plan.paths == pytest.approx(wanted, rel=2 / plan.correction_paths)


def test_a_common_plan_takes_the_most_paths_of_each_branch():
    """By hand: the quantity of the larger variance needs more of the low branch, that of the noisier R of the other."""
    views = {
        "a": {0: view(quantity(differences(4.0, float16=0.01))), 1: view(quantity(differences(0.25)), steps=3)},
        "b": {0: view(quantity(differences(1.0, float16=0.09))), 1: view(quantity(differences(0.25)), steps=3)},
    }
    schemes = {0: SPLIT16, 1: REFERENCE}
    plans_of = {name: allocate(one, schemes, 1e-2, 0.25, ALPHA) for name, one in views.items()}
    (a0, a1), (b0, b1) = (plans_of[name].levels for name in "ab")
    assert a0.paths > b0.paths
    assert a0.correction_paths < b0.correction_paths
    assert a1.paths > b1.paths  # the whole of a costs more, so that every level of it needs more
    found = common_plan(plans_of)
    first, second = found.levels
    assert (first.level, first.scheme, first.bounded) == (0, SPLIT16, False)
    assert (first.low.paths, first.low.decided_by) == (a0.paths, "a")
    assert (first.correction.paths, first.correction.decided_by) == (b0.correction_paths, "b")
    assert (second.low.paths, second.low.decided_by, second.correction) == (a1.paths, "a", None)
    assert first.cost == a0.paths * 0.25 + b0.correction_paths * 1.25
    assert second.cost == 3 * a1.paths
    assert found.cost == first.cost + second.cost
    # Both quantities have what they need, and neither's own plan would do for the other.
    assert found.cost > max(plan.cost for plan in plans_of.values())


def test_the_common_plan_of_one_quantity_is_its_own():
    """Nothing is added where there is nothing to share; of equal needs the first quantity is named."""
    views = {0: view(yes_no(0)), 1: view(quantity(differences(0.25)), steps=3)}
    own = allocate(views, {0: SPLIT16, 1: REFERENCE}, 1e-2, 0.25, ALPHA)
    for names in (["a"], ["a", "b"]):
        found = common_plan(dict.fromkeys(names, own))
        assert found.cost == own.cost
        assert [(one.low.paths, one.cost, one.bounded) for one in found.levels] == [
            (one.paths, one.cost, one.bounded) for one in own.levels
        ]
        assert {one.low.decided_by for one in found.levels} == {"a"}
