"""Approximate draws: how the variance of their corrections goes with the step, and what strata do to its tail.

Run as a program it writes reports/approximate_draws.md: geometric Brownian motion (r = .05, s = .2, T = 1, S_0 = 1,
Euler), its end and a call struck at 1. R is the correction from float64 with approximate draws, piecewise constant, to
float64 with exact ones.

First the slope d log Var R / d log h over levels 6 to 10 at 2^18 paths, with its 99% interval. Var R goes like h times
the mean square error of the draws for a smooth quantity, and for the end its closed form stands beside; for a call like
h to a power between a half and 1 (common practice), so that its slope changes inside a ladder.

Then the tail. On coarse levels few paths carry R: those with a draw in one of the two outermost cells, where the normal
has no bound and the approximate one has. The share of such paths, 1 - (1 - 2 / N)^n of n draws and N cells, is known
exactly, so that they can be a stratum of their own. Effective sizes are (sum R^2)^2 / sum R^4: of a plain sample of
2^18 paths, and inside (no such draw) and outside (at least one) of a sample that gives each stratum half of them; an
audit asks for 50. The gain is the variance of the mean of R by a plain sample over that by the two strata, each with
its best share of the paths.
"""

from __future__ import annotations

import math
import sys
from pathlib import Path

import numpy as np

from narrowgauge.draws.approximate import Constant
from narrowgauge.draws.normals import exact_normals
from narrowgauge.judge.intervals import Interval
from narrowgauge.judge.separation import slope
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.moments import Series

LEVELS, PATHS = range(6, 11), 2**18
SLOPE_CELLS = (2**6, 2**8, 2**10, 2**12)
COARSE, TAIL_CELLS = range(5), (2**6, 2**10, 2**12)
PAIR = ("float64/approximate", "float64")


_FINDINGS = """\
What it gave. With 2^12 cells 2^18 paths are too few on the coarsest levels by the audit's rule: there an audit draws
more, or leaves the level undecided. The outer stratum has a kurtosis of 6 to 30, so that thousands of its paths count.
What is left inside comes from the cells next to the outermost ones, which a third stratum could hold. The gain is 4 to
8 with fine tables and 1.5 to 3 with 2^6 cells, and becomes less as more draws make up a path. An audit does not sample
by strata: its intervals rest on paths that are all alike."""


def end_and_call(dW, h, rate=0.05, volatility=0.2):
    """The end of a geometric Brownian path, Euler from 1, and a call struck at 1."""
    S = np.full(dW.shape[1], 1.0)
    for dw in dW:
        S = S + (rate * h * S + volatility * S * dw)
    return {"end": S, "call": np.maximum(S - 1.0, 0.0)}


def corrections(cells: int, levels: range, paths: int, seed: int = 1) -> dict[str, dict[int, Series]]:
    """Return the series of R by quantity and level, as an audit measures them."""
    file = audit_file_from(
        {
            "kernel": {"run": end_and_call, "takes": "increments"},
            "ladder": {"horizon": 1.0, "finest": max(levels)},
            "formats": {"narrow": ["float32"], "wide": ["float64"]},
            "draws": {"approximate": "constant", "cells": cells, "formats": ["float64"]},
            "sampling": {"seed": seed},
        }
    )
    runner = BlockRunner(file, find_kernel(file))
    found: dict[str, dict[int, Series]] = {"end": {}, "call": {}}
    for level in levels:
        tally = runner.run(level, 0)
        for block in range(1, -(-paths // runner.paths(level))):
            tally = tally + runner.run(level, block)
        for name, series in found.items():
            series[level] = tally.quantities[name].corrections[PAIR]
    return found


def exact_variance(cells: int, level: int, rate: float = 0.05, volatility: float = 0.2) -> float:
    """Return Var R of the end in closed form, on a level above 0.

    Fine and coarse end are products over pairs of steps of factors linear in each normal, so that the mean of a product
    of two of them is a power of that of their factors, which E[Z Z~] = E[Z~^2] = 1 - mean square error gives. The means
    of all four cancel.
    """
    h = 2.0**-level
    a, whole, b = 1 + rate * h, 1 + 2 * rate * h, volatility * math.sqrt(h)
    close = 1 - Constant.of(cells).mean_square_error

    def paired(one: str, other: str, both: float) -> float:
        # E of two factors: (a + b Z1)(a + b Z2) of a fine path, A + b (Z1 + Z2) of a coarse one; E[Z Z'] is `both`.
        if one == other == "fine":
            return (a * a + b * b * both) ** 2
        return whole * whole + 2 * b * b * both if one == other else a * a * whole + 2 * a * b * b * both

    parts = (("fine", "exact", 1), ("coarse", "exact", -1), ("fine", "cheap", -1), ("coarse", "cheap", 1))
    return math.fsum(
        sign * other_sign * paired(one, other, 1.0 if kind == other_kind == "exact" else close) ** (2 ** (level - 1))
        for one, kind, sign in parts
        for other, other_kind, other_sign in parts
    )


def exact_slope(cells: int, levels: range = LEVELS) -> float:
    """Return the least-squares slope of the closed form over some levels."""
    return float(-np.polyfit(levels, np.log2([exact_variance(cells, level) for level in levels]), 1)[0])


def slopes(cells: int, levels: range = LEVELS, paths: int = PATHS) -> dict[str, Interval]:
    """Return the slope by quantity, with its interval at 99%."""
    return {name: slope(series, 2, 0.01) for name, series in corrections(cells, levels, paths).items()}


def uniforms(source: np.random.Generator, steps: int, paths: int, cells: int, outside: bool) -> np.ndarray:
    """Return uniforms (steps, paths) of one stratum: with a draw in an outermost cell on every path, or on none."""
    inner = 1 / cells + source.random((steps, paths)) * (1 - 2 / cells)
    if not outside:
        return inner
    # The first draw out there is at a step that has a geometric distribution, cut at the end of the path.
    share = 2 / cells
    whole = -np.expm1(steps * np.log1p(-share))
    first = (np.log1p(-whole * source.random(paths)) / np.log1p(-share)).astype(np.int64)
    step, path = np.arange(steps)[:, None], np.arange(paths)
    drawn = np.where(step < first, inner, source.random((steps, paths)))
    outer = source.random(paths) / cells
    drawn[first, path] = np.where(source.random(paths) < 0.5, outer, 1.0 - outer)
    return np.clip(drawn, 2.0**-53, 1.0 - 2.0**-53)


def correction(drawn: np.ndarray, cells: int, level: int) -> np.ndarray:
    """Return R of the path's end, in plain NumPy."""
    h = 2.0**-level
    both = []
    for normals in (exact_normals(drawn), Constant.of(cells)(drawn)):
        increments = normals * np.sqrt(h)
        fine = end_and_call(increments, h)["end"]
        if level:
            fine = fine - end_and_call(increments[::2] + increments[1::2], 2 * h)["end"]
        both.append(fine)
    return both[0] - both[1]


def strata(cells: int, level: int, paths: int = PATHS, seed: int = 1) -> tuple[float, list[Series]]:
    """Return the share of paths with a draw in an outermost cell, and R without and with one, half the paths each."""
    source = np.random.Generator(np.random.PCG64DXSM([seed, cells, level]))
    steps = 2**level
    share = float(-np.expm1(steps * np.log1p(-2 / cells)))
    found = [
        Series.of(correction(uniforms(source, steps, paths // 2, cells, outside), cells, level))
        for outside in (False, True)
    ]
    return share, found


def gain(share: float, inside: Series, outside: Series) -> tuple[float, float]:
    """Return Var R of all paths together, and by how much the best shares for the strata divide the mean's variance."""
    weights = (1 - share, share)
    parts = (inside.moments, outside.moments)
    middle = sum(w * part.average for w, part in zip(weights, parts, strict=True))
    whole = sum(w * (part.variance + (part.average - middle) ** 2) for w, part in zip(weights, parts, strict=True))
    best = sum(w * part.variance**0.5 for w, part in zip(weights, parts, strict=True)) ** 2
    return whole, whole / best


def _slope_rows() -> list[str]:
    rows = ["| cells | end, closed form | end | call |", "|---" * 4 + "|"]
    for cells in SLOPE_CELLS:
        found = slopes(cells)
        shown = [f"{found[name].estimate:.3f} ({found[name].low:.3f} to {found[name].high:.3f})" for name in found]
        rows.append(f"| 2^{cells.bit_length() - 1} | {exact_slope(cells):.3f} | {' | '.join(shown)} |")
        print(rows[-1], flush=True)
    return rows


def _tail_rows() -> list[str]:
    headings = ("cells", "level", "share", "kurtosis", "kurtosis inside", "kurtosis outside")
    headings += ("effective size", "inside", "outside", "gain")
    rows = [f"| {' | '.join(headings)} |", "|---" * len(headings) + "|"]
    for cells in TAIL_CELLS:
        plain = corrections(cells, COARSE, PATHS)["end"]
        for level in COARSE:
            share, (inside, outside) = strata(cells, level)
            kurtosis = [f"{one.moments.kurtosis:,.0f}" for one in (plain[level], inside, outside)]
            sizes = [f"{one.effective_size:,.0f}" for one in (plain[level], inside, outside)]
            cells_shown = [f"2^{cells.bit_length() - 1}", str(level), f"{share:.3g}", *kurtosis, *sizes]
            rows.append(f"| {' | '.join(cells_shown)} | {gain(share, inside, outside)[1]:.2f} |")
            print(rows[-1], flush=True)
    return rows


def main() -> None:
    """Run the study and write its output."""
    text = (__doc__ or "").split("\n\n", 1)
    lines = ["# Approximate draws", "", text[1].strip(), "", "Made by `python tests/studies/approximate_draws.py`.", ""]
    lines += ["## Slopes over levels 6 to 10", "", *_slope_rows(), ""]
    lines += ["## Strata, for the end of the path", "", *_tail_rows(), "", _FINDINGS]
    report = Path(__file__).parents[2] / "reports" / "approximate_draws.md"
    report.write_text("\n".join(lines) + "\n", encoding="utf-8")


if __name__ == "__main__":
    sys.exit(main())
