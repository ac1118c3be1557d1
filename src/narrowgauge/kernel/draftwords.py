"""What a drafted audit file says beside each key, and the values that stand there for keys without a default."""

from __future__ import annotations

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.kernel.branchestable import BRANCH_MEANINGS, BRANCH_VALUES

__all__ = ["MEANINGS", "VALUES"]

# One line of meaning for every key; what TABLES has and this has not is found by a test.
MEANINGS: dict[str, str] = {
    "kernel.run": "file and function; the path is relative to the folder of this file",
    "kernel.takes": "increments, normals, uniforms or rng",
    "kernel.factors": "draws per step",
    "kernel.layout": "order of the axes of the array of draws; without paths, one path a call",
    "kernel.coupling": '"none": levels are measured without their differences',
    "kernel.modules": "further modules and packages whose NumPy is rounded",
    "kernel.shared": "modules of theirs that cannot be copied, run as they are and not rounded",
    "kernel.allow": 'lines such as "model.py:41" where values may leave and go on unrounded',
    "kernel.rounds": '"itself": not emulated; the kernel gets its draws in the format\'s own type',
    "ladder.horizon": "time that a path covers; fill in",
    "ladder.coarsest_steps": "steps of a path on level 0",
    "ladder.refinement": "factor from the steps of a level to those of the next",
    "ladder.finest": "last level, the first is 0; fill in",
    "target.rmse": "root mean square error asked for; or a table of one by quantity",
    "target.bias_share": "share of it that rounding may shift the mean by",
    "target.worthwhile": "an edge below this ratio of costs is not worth having",
    "target.largest_correction": "no default; bound on what a wider format changes in a yes/no quantity",
    "formats.today": "the format the kernel runs in now",
    "formats.narrow": "formats that are tried",
    "formats.wide": "formats that may be the wide half of a split",
    "formats.schemes": "one format alone, or split into a low and a correction branch",
    "draws.approximate": "approximate normals: constant, linear, polynomial, file.py:function",
    "draws.cells": "of constant: a power of two",
    "draws.intervals": "of linear, in place of cells: dyadic intervals on either side of 1/2",
    "draws.degree": "of polynomial, in place of cells",
    "draws.formats": "formats that are tried with them too; the default is the narrow ones",
    "cost.float64": "relative cost of one step of one path; the default is storage bits / 64",
    **{f"cost.{name}": "the same" for name in FORMATS if name != "float64"},
    **BRANCH_MEANINGS,
    "cost.draws": "one draw",
    "cost.approximate_draws": "no default; one approximate draw, else as much as an exact one",
    "cost.path": "fixed cost of a path",
    "cost.measured": 'costs of a step from measured times, only with rounds = "itself"',
    "sampling.block": "most paths of a block, a multiple of 1024",
    "sampling.paths": "paths of a level at the first look",
    "sampling.most_paths": "paths of a level at which looking ends",
    "sampling.confidence": "confidence of every interval",
    "sampling.seed": "of the random numbers",
}
# Values for keys that have no default; those of the ladder have to be there for the file to be read.
VALUES: dict[str, object] = {
    "ladder.horizon": 1.0,
    "target.rmse": 0.002,
    "target.largest_correction": 1.0,
    "draws.approximate": "constant",
    "draws.cells": 1024,
    "draws.intervals": 16,
    "draws.degree": 9,
    "draws.formats": ("float16", "bfloat16", "float32"),
    "cost.approximate_draws": 0.0,
    **BRANCH_VALUES,
    **{f"cost.{name}": row.bits / 64 for name, row in FORMATS.items()},
}
