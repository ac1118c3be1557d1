"""Paths per branch and the total saving, against the published formula and brute force."""

from __future__ import annotations

import math

import numpy as np
import pytest
from judge_cases import NEAR, PATHS, differences, quantity, shape, uneven, view
from scipy import stats

from narrowgauge.judge.allocation import Allocation, LevelPlan, allocate, saving
from narrowgauge.judge.gain import Scheme
from narrowgauge.kernel.auditfile import CostTable

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
    found = allocate(views, dict.fromkeys(views, REFERENCE), 0.1, HALF)
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
    found = allocate(views, {0: SPLIT16, 1: REFERENCE}, 1e-3, 0.25)
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
    found = allocate(views, {0: SPLIT16}, 1e-3, 0.25)
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
    )
    assert plans(loose) == [(32, 640), (32, 32), (32, None)]


def test_records_are_what_they_say():
    """An allocation holds its levels in the order of the schemes."""
    views = {3: view(quantity(differences(1.0))), 1: view(quantity(differences(1.0)))}
    found = allocate(views, {3: REFERENCE, 1: REFERENCE}, 1e3, 0.25)
    expected = [LevelPlan(level=k, scheme=REFERENCE, paths=32, correction_paths=None, cost=32.0) for k in (3, 1)]
    assert found == Allocation(rmse=1e3, levels=tuple(expected), cost=64.0)


def test_saving_is_the_square_of_the_ratio_of_sums():
    """(sum S of the rival / sum S of the plan)^2 over two levels; equal batches leave no doubt about it."""
    views = {
        0: view(quantity(differences(1.0, float16=0.001))),
        1: view(quantity(differences(0.25, float16=0.002)), steps=3),
    }
    found = saving(views, dict.fromkeys(views, SPLIT16), REFERENCE, ALPHA)
    theirs = 1 + math.sqrt(0.25 * 3)
    ours = math.sqrt(1.001 * 0.25) + math.sqrt(0.001 * 1.25) + math.sqrt(0.252 * 0.75) + math.sqrt(0.002 * 3.75)
    for figure in (found.estimate, found.low, found.high):
        assert figure == pytest.approx((theirs / ours) ** 2, rel=2 * NEAR)
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

    def figure(left_level, left_batch):
        theirs = ours = 0.0
        for level, one in arms.items():
            kept = (batch != left_batch) | (level != left_level)
            wide, narrow = (np.var(one[name][kept], ddof=1) * steps[level] for name in ("float64", "float16"))
            theirs += math.sqrt(wide)
            ours += math.sqrt(narrow / 4)
            if level == 0:
                ours += math.sqrt(np.var((one["float64"] - one["float16"])[kept], ddof=1) * 1.25)
        return 2 * math.log(theirs / ours)

    parts = []
    for level in arms:
        left = np.array([figure(level, k) for k in range(32)])
        parts.append(31 / 32 * ((left - left.mean()) ** 2).sum())
    dof = sum(parts) ** 2 / sum(part**2 / 31 for part in parts)
    half = stats.t.ppf(1 - ALPHA / 2, dof) * math.sqrt(sum(parts))
    middle = figure(None, None)
    found = saving(views, schemes, REFERENCE, ALPHA)
    near = NEAR / math.sqrt(sum(parts))
    assert found.estimate == pytest.approx(math.exp(middle), rel=NEAR)
    assert found.se == pytest.approx(math.sqrt(sum(parts)), rel=near)
    assert (found.low, found.high) == pytest.approx((math.exp(middle - half), math.exp(middle + half)), rel=near)


def test_nothing_that_varies_saves_nothing():
    """Where neither rival nor plan has any variance there is no ratio."""
    still = {0: view(quantity({"float64": np.ones(PATHS)}), CostTable(float64=1.0))}
    assert saving(still, {0: REFERENCE}, REFERENCE, ALPHA) is None
