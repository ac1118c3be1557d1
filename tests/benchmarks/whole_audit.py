"""The whole audit in four formats over a plain float64 Monte Carlo run of the same paths, and the share of the draws.

The plain run makes the same uniforms, inverts them, runs fine and coarse path of every level in plain NumPy, and keeps
the mean and the variance of their difference. Its means must be those of the audit's reference.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from functools import partial

import numpy as np
from alternating import alternated, ratios
from benchmark_figures import Section, at_most, figure_of
from benchmark_sizes import Size
from timed_kernels import KERNELS, PathKernel

import narrowgauge
from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.draws.coarsen import Draws, coarse_draws, fine_draws
from narrowgauge.draws.normals import exact_normals
from narrowgauge.draws.streams import Purpose, block_paths, uniforms
from narrowgauge.kernel.auditfile import AuditFile, audit_file_from
from narrowgauge.record.audit import AuditRecord

__all__ = ["AUDITED", "audit_tables", "whole_audit"]

AUDITED = ("one factor", "stochastic volatility")
PLAIN = "a plain float64 Monte Carlo run"
ASKED = 2.5

Doubles = np.ndarray[tuple[int, ...], np.dtype[np.float64]]


def whole_audit(size: Size) -> Section:
    """Return audit over plain run, and the share of the draws, for two kernels."""
    section = Section()
    for name in AUDITED:
        kernel = KERNELS[name]
        tables = audit_tables(kernel, size.finest, size.paths)
        file = audit_file_from(tables)
        audit = partial(narrowgauge.audit, tables, quiet=True)
        plain = partial(plain_run, file, kernel)
        _check_the_same(audit().record, plain())
        parts: dict[str, Callable[[], None]] = {
            "its uniforms": partial(_draw, file, _uniforms),
            "its uniforms, inverted": partial(_draw, file, _inverted),
            "its uniforms, inverted and rounded in every format": partial(_draw, file, _rounded),
        }
        seconds = alternated({PLAIN: plain, "audit": audit, **parts}, size.slow_rounds)
        values = ratios(seconds["audit"], seconds[PLAIN])
        section.figures.append(figure_of(values, "the audit", PLAIN, kernel=name, asked=at_most(ASKED)))
        for part in parts:
            section.figures.append(figure_of(ratios(seconds[part], seconds["audit"]), part, "the audit", kernel=name))
    section.notes.append(
        f"levels 0 to {size.finest} of 1 to {2**size.finest} steps, at least {size.paths:,} paths a level; each "
        "line of the draws holds the ones before"
    )
    return section


def audit_tables(kernel: PathKernel, finest: int, paths: int) -> dict[str, object]:
    """Return an audit in the default formats, with one look, so that it runs just these paths."""
    sampling = {"paths": paths, "most_paths": paths, "seed": 1}
    return {**kernel.tables(), "ladder": {"horizon": 1.0, "finest": finest}, "sampling": sampling}


def plain_run(file: AuditFile, kernel: PathKernel) -> list[tuple[float, float]]:
    """Return mean and variance of the level difference, level by level, as somebody would compute them today."""
    found, keywords = [], file.keywords()
    for level in file.ladder.levels:
        step, count, total, squares = file.ladder.step_size(level), 0, 0.0, 0.0
        for block, shape in _blocks(file, level):
            draws = math.sqrt(step) * exact_normals(uniforms(file.sampling.seed, Purpose.AUDIT, level, block, shape))
            difference = kernel.function(_shaped(draws), step, **keywords)
            if level:
                coarse = draws[0::2] + draws[1::2]
                difference = difference - kernel.function(_shaped(coarse), 2 * step, **keywords)
            count += difference.size
            total += float(difference.sum())
            squares += float((difference * difference).sum())
        mean = total / count
        found.append((mean, squares / count - mean * mean))
    return found


def _shaped(draws: Doubles) -> Doubles:
    return draws[:, 0, :] if draws.shape[1] == 1 else draws


def _blocks(file: AuditFile, level: int) -> Iterator[tuple[int, tuple[int, int, int]]]:
    """Yield the blocks of a level and the shape of their draws."""
    steps, factors = file.ladder.steps(level), file.kernel.factors
    paths = block_paths(file.sampling.block, steps, factors)
    for block in range(-(-file.sampling.paths // paths)):
        yield block, (steps, factors, paths)


def _check_the_same(record: AuditRecord, plain: list[tuple[float, float]]) -> None:
    """Make sure that both run the same paths: sums of one order and of another differ by roundings alone."""
    levels = record.quantities["value"].levels
    for entry, (mean, _) in zip(levels, plain, strict=True):
        found = entry.reference.level_mean
        if found is None or not math.isclose(found, mean, rel_tol=1e-9, abs_tol=1e-12):
            raise AssertionError(f"level {entry.level}: the audit has {found}, plain NumPy {mean}")


def _draw(file: AuditFile, make: Callable[[AuditFile, int, int, tuple[int, int, int]], object]) -> None:
    """Make the draws of all blocks of an audit, as far as `make` goes."""
    for level in file.ladder.levels:
        for block, shape in _blocks(file, level):
            make(file, level, block, shape)


def _uniforms(file: AuditFile, level: int, block: int, shape: tuple[int, int, int]) -> Doubles:
    return uniforms(file.sampling.seed, Purpose.AUDIT, level, block, shape)


def _inverted(file: AuditFile, level: int, block: int, shape: tuple[int, int, int]) -> Draws:
    values = _uniforms(file, level, block, shape)
    return Draws.of("increments", values, file.ladder.step_size(level), file.ladder.refinement)


def _rounded(file: AuditFile, level: int, block: int, shape: tuple[int, int, int]) -> None:
    draws = _inverted(file, level, block, shape)
    for arm in file.arms:
        arithmetic = arithmetic_named(arm)
        fine = fine_draws(draws, arithmetic)
        if level:
            coarse_draws(draws, fine, arithmetic)
