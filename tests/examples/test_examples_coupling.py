"""The ladders of the example kernels in plain float64: how V_l falls, and that the sum over levels telescopes."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
import pytest
from example_files import NAMES, STANDARD_ERRORS, Array, audit_file, increments, kernel_of


@dataclass(frozen=True, slots=True, kw_only=True)
class Level:
    """Fine and coarse results of one level on the same draws; level 0 has no coarse path."""

    fine: Mapping[str, Array]
    coarse: Mapping[str, Array]

    def log_variance(self, quantity: str) -> tuple[float, float]:
        """Return log2 of V_l and its standard error, sqrt((kurtosis - 1) / N) / ln 2."""
        difference = self.fine[quantity] - self.coarse[quantity]
        squares = (difference - difference.mean()) ** 2
        variance = float(squares.mean())
        kurtosis = float((squares**2).mean()) / variance**2
        return math.log2(variance), math.sqrt((kurtosis - 1.0) / difference.size) / math.log(2.0)


def ladder(name: str, seed: int, coarsen: Callable[[Array], Array], *, finest: int | None = None) -> list[Level]:
    """Run the example at its own parameters, 32,768 paths a level, its coarse paths on `coarsen(draws)`."""
    document = audit_file(name)
    kernel, steps, levels = kernel_of(name), document["ladder"]["coarsest_steps"], []
    for level in range((document["ladder"]["finest"] if finest is None else finest) + 1):
        n = steps * 2**level
        draws = increments(seed + level, n, document["kernel"]["factors"], paths=32768)
        fine = kernel(draws, 1.0 / n, **document["parameters"])
        coarse = kernel(coarsen(draws), 2.0 / n, **document["parameters"]) if level else {}
        levels.append(
            Level(
                fine={key: value.astype(np.float64) for key, value in fine.items()},
                coarse={key: value.astype(np.float64) for key, value in coarse.items()},
            )
        )
    return levels


def sums_of_two(draws: Array) -> Array:
    """Return the increments over two steps each: the right coarse draws."""
    return draws[0::2] + draws[1::2]


def sums_in_wrong_order(draws: Array) -> Array:
    """Return the right sums in reversed order of time: the right law, but another path."""
    return sums_of_two(draws)[::-1].copy()


def every_second(draws: Array) -> Array:
    """Return half of the increments and lose the rest: coarse draws of half the variance."""
    return draws[0::2].copy()


@pytest.fixture(scope="module")
def ladders() -> dict[str, list[Level]]:
    """Return both examples' ladders with the right coupling."""
    return {"reserve": ladder("reserve", 1100, sums_of_two), "membrane": ladder("membrane", 1200, sums_of_two)}


def slope(levels: list[Level], quantity: str) -> tuple[float, float]:
    """Return by how many powers of two V_l falls a level, over the finest three steps, and its error."""
    start, start_error = levels[-4].log_variance(quantity)
    end, end_error = levels[-1].log_variance(quantity)
    return (start - end) / 3.0, math.hypot(start_error, end_error) / 3.0


@pytest.mark.parametrize(("name", "quantity"), [("reserve", "option"), ("reserve", "output"), ("membrane", "energy")])
def test_variance_of_a_smooth_difference_falls_with_the_step(
    ladders: dict[str, list[Level]], name: str, quantity: str
) -> None:
    """V_l of a Lipschitz quantity falls faster than the half order of a yes/no; false alarms below 2.9e-7.

    Euler's orders are 1 and 1/2 ("Multilevel Monte Carlo methods", Acta Numerica 24, 2015, table 5.2, doi
    10.1017/S096249291500001X). Control: with the increments in the wrong order V_l must not fall so.
    """
    order, error = slope(ladders[name], quantity)
    assert order - STANDARD_ERRORS * error > 0.5
    order, error = slope(ladder(name, 1300, sums_in_wrong_order), quantity)
    assert order + STANDARD_ERRORS * error < 0.5


def test_variance_of_a_yes_or_no_falls_more_slowly(ladders: dict[str, list[Level]]) -> None:
    """V_l of the crossing falls, but more slowly than that of the energy; false alarms below 5.7e-7 of seeds.

    Falls: by more than half of its order, which is 1/2 (the same table). The two quantities share their draws;
    their errors are added as if they always went against each other. Control: with the increments in the wrong
    order it must not fall so.
    """
    smooth, smooth_error = slope(ladders["membrane"], "energy")
    order, error = slope(ladders["membrane"], "crossed")
    assert order - STANDARD_ERRORS * error > 0.25
    assert order + STANDARD_ERRORS * error < smooth - STANDARD_ERRORS * smooth_error
    order, error = slope(ladder("membrane", 1400, sums_in_wrong_order), "crossed")
    assert order + STANDARD_ERRORS * error < 0.25


def telescoping(levels: list[Level]) -> float:
    """Return the largest gap between a coarse mean and the fine mean one level down, in standard errors."""
    worst = 0.0
    for below, level in itertools.pairwise(levels):
        for quantity, coarse in level.coarse.items():
            fine = below.fine[quantity]
            error = math.sqrt(coarse.var(ddof=1) / coarse.size + fine.var(ddof=1) / fine.size)
            worst = max(worst, abs(float(coarse.mean() - fine.mean())) / error)
    return worst


@pytest.mark.parametrize("name", NAMES)
def test_sum_over_levels_telescopes(ladders: dict[str, list[Level]], name: str) -> None:
    """The coarse path of a level has the mean of the fine path below; false alarms below 12 x 5.7e-7.

    Control: coarse draws that lose half of the increments must be refused.
    """
    assert telescoping(ladders[name]) < STANDARD_ERRORS
    assert telescoping(ladder(name, 1500, every_second, finest=2)) > STANDARD_ERRORS


@pytest.mark.parametrize("name", NAMES)
def test_constants_and_results_lie_in_the_range_of_binary16(ladders: dict[str, list[Level]], name: str) -> None:
    """Parameters are normal numbers of binary16 in size, results at most its largest number, 65504.

    IEEE 754-2019, table 3.5: smallest normal number 2^-14 (recalled from memory).
    """
    for value in audit_file(name)["parameters"].values():
        assert 2.0**-14 <= abs(value) <= 65504.0
    for level in ladders[name]:
        for values in level.fine.values():
            assert float(np.abs(values).max()) <= 65504.0
