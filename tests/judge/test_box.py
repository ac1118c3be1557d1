"""The part of a box that can be claimed, held against every box there is, and what passing scenarios prove."""

from __future__ import annotations

import itertools
import random

import pytest
from scipy import stats

from narrowgauge.judge.box import Box, claimed, failing_share, inside, share
from narrowgauge.kernel.domaintable import AxisTable

UNIT = AxisTable(low=0.0, high=1.0)


def every_box(axes: list[AxisTable], audited: tuple[float, ...], passing: list[tuple[float, ...]]) -> list[Box]:
    """All boxes around the audited point whose sides end at the border or at a point that passes."""
    sides = []
    for number, axis in enumerate(axes):
        ends = {audited[number], *(point[number] for point in passing)}
        lows = {axis.low, *(end for end in ends if end <= audited[number])}
        highs = {axis.high, *(end for end in ends if end >= audited[number])}
        sides.append(list(itertools.product(sorted(lows), sorted(highs))))
    return [tuple(box) for box in itertools.product(*sides)]


@pytest.mark.parametrize("sides", [1, 2, 3])
def test_no_box_without_a_failing_scenario_is_larger(sides: int) -> None:
    """Random scenarios of fixed seeds, half of them failing, against a search through all boxes."""
    axes = [UNIT] * sides
    for seed in range(12):
        chance = random.Random(seed)
        points = [tuple(chance.random() for _ in axes) for _ in range(8 if sides < 3 else 6)]
        passing, failing = points[::2], points[1::2]
        audited = tuple(chance.random() for _ in axes)
        found = claimed(axes, audited, passing, failing)
        assert found is not None
        assert inside(audited, found)
        assert not any(inside(point, found) for point in failing)
        allowed = [box for box in every_box(axes, audited, passing) if not any(inside(point, box) for point in failing)]
        assert share(axes, found) == max(share(axes, box) for box in allowed)


def test_what_passes_everywhere_is_claimed_whole() -> None:
    """Without a failing scenario the box stays as it was asked for."""
    axes = [AxisTable(low=1.0, high=100.0, scale="log"), AxisTable(low=-1.0, high=1.0)]
    assert claimed(axes, (10.0, 0.0), [(2.0, 0.5)], []) == ((1.0, 100.0), (-1.0, 1.0))


def test_a_cut_is_made_at_the_last_scenario_that_passes() -> None:
    """Not at the one that fails, nor halfway to it; the share is one of the scale's coordinate."""
    axes = [AxisTable(low=1.0, high=10_000.0, scale="log")]
    box = claimed(axes, (10.0,), [(5.0,), (100.0,), (2000.0,)], [(1500.0,), (9000.0,)])
    assert box == ((1.0, 100.0),)
    assert share(axes, box) == pytest.approx(0.5)


def test_an_audited_point_that_fails_leaves_nothing() -> None:
    """No box holds it and does not."""
    assert claimed([UNIT, UNIT], (0.5, 0.5), [(0.2, 0.2)], [(0.5, 0.5)]) is None


def test_a_point_beside_the_audited_one_is_cut_on_the_other_side() -> None:
    """Where a failing scenario shares a parameter with the audited point, only the others can tell them apart."""
    assert claimed([UNIT, UNIT], (0.5, 0.5), [], [(0.5, 1.0)]) == ((0.0, 1.0), (0.0, 0.5))


def test_corners_share_their_coordinates() -> None:
    """A corner that fails is cut off below the corners that pass beside it; of two cuts as good the first is taken."""
    passing = [(1.0, 0.0), (0.0, 1.0), (0.0, 0.0), (0.9, 0.9)]
    assert claimed([UNIT, UNIT], (0.5, 0.5), passing, [(1.0, 1.0)]) == ((0.0, 0.9), (0.0, 1.0))


def test_hundreds_of_failing_scenarios_are_cut_off_in_time() -> None:
    """The search gives up on the largest box before it gives up on an answer, which is as safe as any other."""
    chance = random.Random(7)
    axes = [UNIT] * 6
    points = [tuple(chance.random() for _ in axes) for _ in range(400)]
    failing = [point for point in points if sum(point) > 3.2]
    passing = [point for point in points if sum(point) <= 3.2]
    found = claimed(axes, (0.4,) * 6, passing, failing)
    assert found is not None
    assert inside((0.4,) * 6, found)
    assert not any(inside(point, found) for point in failing)


def test_32_passing_scenarios_prove_8_9_per_cent() -> None:
    """The figure of the specification: 1 - .05^(1/32) = 8.9%, from (1 - p)^32 = .05."""
    assert round(100 * failing_share(0, 32), 1) == 8.9
    assert (1 - failing_share(0, 32)) ** 32 == pytest.approx(0.05, rel=1e-12)


@pytest.mark.parametrize(("failed", "of"), [(1, 32), (3, 16), (15, 16)])
def test_with_failing_ones_the_bound_is_the_binomial_one(failed: int, of: int) -> None:
    """At the bound so few failures, or fewer, have a probability of 5%."""
    assert stats.binom.cdf(failed, of, failing_share(failed, of)) == pytest.approx(0.05, rel=1e-9)


def test_what_always_fails_proves_nothing() -> None:
    """All of the box may fail."""
    assert failing_share(4, 4) == 1.0
