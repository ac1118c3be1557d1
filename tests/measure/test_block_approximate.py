"""Approximate draws in a block: from the same uniforms, coupled by the same rules, in each arm's own arithmetic."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from block_cases import GEOMETRIC, PATHS, file_for, runner_for, same, written

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.draws.approximate import Constant
from narrowgauge.draws.normals import exact_normals
from narrowgauge.draws.streams import Purpose, uniforms
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner

FIRST_AND_LAST = """
def value(draws, h):
    return {"first": draws[0], "last": draws[-1]}
"""
PARAMETERS = {"r": 0.05, "s": 0.2}
LEVEL = 2


def drawing(folder: Path, takes: str, **draws: object) -> BlockRunner:
    asked = {"approximate": "constant", "cells": 64, **draws}
    return runner_for(folder, FIRST_AND_LAST, kernel={"takes": takes}, draws=asked)


def uniforms_of(level: int) -> np.ndarray:
    return uniforms(1, Purpose.AUDIT, level, 0, (2**level, 1, PATHS))[:, 0]


def seen(runner: BlockRunner, name: str) -> tuple[dict[str, np.ndarray], dict[str, np.ndarray]]:
    """What fine and coarse path see of the approximate draws in a format."""
    caller = runner.caller(arithmetic_named(name), kind="approximate")
    draws = runner.draws(LEVEL, 0)
    return caller.fine(draws, LEVEL, coarse_follows=True), caller.coarse(draws, LEVEL)


@pytest.mark.parametrize("name", ["float16", "bfloat16", "float32", "float64"])
@pytest.mark.parametrize("takes", ["increments", "normals"])
def test_the_fine_path_sees_the_map_of_the_uniforms_rounded_once(tmp_path: Path, takes: str, name: str) -> None:
    """Table values, times sqrt(h) in float64 for increments, then one rounding: bit for bit."""
    fine, _ = seen(drawing(tmp_path, takes), name)
    scale = np.sqrt(0.25) if takes == "increments" else 1.0
    wanted = arithmetic_named(name).cast(Constant.of(64)(uniforms_of(LEVEL)) * scale).astype(np.float64)
    assert np.array_equal(fine["first"], wanted[0])
    assert np.array_equal(fine["last"], wanted[-1])


@pytest.mark.parametrize("name", ["float16", "float64"])
def test_the_coarse_path_sees_sums_of_the_approximate_ones(tmp_path: Path, name: str) -> None:
    """In the arm's arithmetic, in order of time; float16 rounds the sum of two rounded increments."""
    _, coarse = seen(drawing(tmp_path, "increments"), name)
    arithmetic = arithmetic_named(name)
    fine = arithmetic.cast(Constant.of(64)(uniforms_of(LEVEL)) * np.sqrt(0.25))
    assert np.array_equal(coarse["last"], arithmetic.apply(np.add, (fine[2], fine[3])).astype(np.float64))


def test_the_coarse_path_sees_normals_scaled(tmp_path: Path) -> None:
    """Sums of approximate normals times 1 / sqrt(M)."""
    _, coarse = seen(drawing(tmp_path, "normals"), "float64")
    normals = Constant.of(64)(uniforms_of(LEVEL))
    assert np.array_equal(coarse["first"], (normals[0] + normals[1]) * (1 / np.sqrt(2)))


def test_exact_draws_are_what_they_are_without_approximate_ones(tmp_path: Path) -> None:
    """Making approximate normals first leaves the uniforms as they are."""
    draws = drawing(tmp_path, "normals").draws(LEVEL, 0)
    assert np.array_equal(draws.values[:, 0], exact_normals(uniforms_of(LEVEL)))


def test_arms_with_exact_draws_measure_the_same_beside_approximate_ones(tmp_path: Path) -> None:
    """Bit for bit, in every moment; only arms and pairs are added, with float64 where draws alone are to be seen."""
    path = written(tmp_path, GEOMETRIC)
    with_draws, without = (
        file_for(path, {"parameters": PARAMETERS, **more})
        for more in ({"draws": {"approximate": "linear", "formats": ["float16"]}}, {})
    )
    both, plain = (BlockRunner(file, find_kernel(file)) for file in (with_draws, without))
    assert both.arms == (*plain.arms, "float16/approximate", "float64/approximate")
    assert set(both.pairs) - set(plain.pairs) == {
        ("float16/approximate", "float32"),
        ("float16/approximate", "float64"),
        ("float64/approximate", "float64"),
    }
    found, known = both.run(LEVEL, 0), plain.run(LEVEL, 0)
    for name, quantity in known.quantities.items():
        other = found.quantities[name]
        assert same(quantity.coarse, other.coarse)
        for part in ("values", "errors", "differences", "corrections"):
            assert all(same(series, getattr(other, part)[key]) for key, series in getattr(quantity, part).items())


def test_draws_alone_err_by_their_mean_square_error(tmp_path: Path) -> None:
    """One normal: the variance of float64's error is the map's, within 5 standard errors; the fixed seed is 1.

    False-alarm rate 6e-7 if the errors were normal; they have heavy tails, for which the error is the sample's own.
    """
    runner = drawing(tmp_path, "normals")
    tally = runner.run(0, 0)
    for block in range(1, 64):
        tally = tally + runner.run(0, block)
    moments = tally.quantities["first"].errors["float64/approximate"].moments
    se = moments.variance * np.sqrt((moments.kurtosis - 1) / moments.total)
    assert abs(moments.variance - Constant.of(64).mean_square_error) < 5 * se
    assert abs(moments.variance - Constant.of(32).mean_square_error) > 5 * se  # negative control
