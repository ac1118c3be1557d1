"""Do 95% intervals of the edge hold the true edge in 95% of audits?

Run as a program it writes reports/coverage.md and reports/coverage.csv: over 200 seeds, for a linear payoff and a call
of a geometric Brownian path (Euler), levels 1 to 5, three formats, split over float64 against float64 alone. The truth
comes from 2^23 paths of another seed, whose own error is a sixteenth of an audit's.
"""

from __future__ import annotations

import csv
import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np

from narrowgauge.judge.asked import level_costs
from narrowgauge.judge.gain import LevelView, Scheme
from narrowgauge.kernel.auditfile import AuditFile, audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.tally import LevelTally

FORMATS = ("float16", "bfloat16", "float32")
LEVELS = range(1, 6)
REFERENCE = Scheme(kind="alone", narrow="float64")
PATHS = 32768
TRUTH_PATHS, TRUTH_SEED = 2**23, 10**9
ALPHA = 0.05

Cell = tuple[str, int, str]


def geometric(dW, h, rate=0.05, volatility=0.2):
    """Geometric Brownian motion, Euler, from 1: the end value and a call struck at 1."""
    S = np.full(dW.shape[1], 1.0)
    for dw in dW:
        S = S + (rate * h * S + volatility * S * dw)
    return {"linear": S, "call": np.maximum(S - 1.0, 0.0)}


def audit_file(seed: int) -> AuditFile:
    """Return the audit of one seed: one look at 32,768 paths, cost 1/2 for every narrow format."""
    return audit_file_from(
        {
            "kernel": {"run": geometric, "takes": "increments"},
            "ladder": {"horizon": 1.0, "finest": 5},
            "formats": {"narrow": list(FORMATS), "wide": ["float64"], "schemes": ["split"]},
            "cost": {"float64": 1.0, "float32": 0.5, "float16": 0.5, "bfloat16": 0.5},
            "sampling": {"paths": PATHS, "most_paths": PATHS, "seed": seed, "confidence": 1 - ALPHA},
        }
    )


def tally(file: AuditFile, level: int, paths: int) -> LevelTally:
    """Return whole blocks of a level, at least `paths` paths."""
    runner = BlockRunner(file, find_kernel(file))
    found = runner.run(level, 0)
    while found.paths < paths:
        found = found + runner.run(level, found.blocks)
    return found


def log_edges(
    file: AuditFile, level: int, paths: int, shrink: float = 1.0
) -> Iterator[tuple[Cell, float, float, float]]:
    """Yield cell, log edge and its bounds; `shrink` below 1 makes the bounds too narrow on purpose."""
    measured = tally(file, level, paths)
    for quantity, series in measured.quantities.items():
        view = LevelView(series, level_costs(file, level), None)
        for name in FORMATS:
            own = Scheme(kind="split", narrow=name, wide="float64")
            interval = view.ratio(own, REFERENCE, ALPHA)
            middle = float(np.log(interval.estimate))
            low, high = (middle + shrink * (float(np.log(end)) - middle) for end in (interval.low, interval.high))
            yield (quantity, level, name), middle, low, high


def truth(paths: int = TRUTH_PATHS) -> dict[Cell, float]:
    """Return the log edge of every cell from other paths."""
    file = audit_file(TRUTH_SEED)
    return {cell: edge for level in LEVELS for cell, edge, _, _ in log_edges(file, level, paths)}


def hits(seeds: range, known: dict[Cell, float], shrink: float = 1.0) -> dict[Cell, int]:
    """Return in how many seeds each cell's interval holds the truth."""
    count = dict.fromkeys(known, 0)
    for seed in seeds:
        file = audit_file(seed)
        for level in LEVELS:
            for cell, _, low, high in log_edges(file, level, PATHS, shrink):
                count[cell] += low <= known[cell] <= high
    return count


def main(seeds: int = 200) -> None:
    """Run the study and write its output."""
    known = truth()
    found = hits(range(1, seeds + 1), known)
    rows = [(*cell, known[cell], count / seeds) for cell, count in found.items()]
    pooled = sum(found.values()) / (seeds * len(found))
    worst, best = min(row[-1] for row in rows), max(row[-1] for row in rows)
    folder = Path(__file__).parents[2] / "reports"
    with (folder / "coverage.csv").open("w", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(["payoff", "level", "format", "true_log_edge", "coverage"])
        writer.writerows(rows)
    table = "\n".join(f"| {q} | {level} | {name} | {edge:.4f} | {share:.3f} |" for q, level, name, edge, share in rows)
    (folder / "coverage.md").write_text(
        f"# Coverage of the 95% intervals of the log edge\n\n{(__doc__ or '').split(chr(10), 2)[2].strip()}\n\n"
        f"{seeds} seeds, one look at {PATHS:,} paths a level; pooled coverage {pooled:.4f}, cells from {worst:.3f} to "
        f"{best:.3f}.\nMade by `python tests/studies/edge_coverage.py`.\n\n"
        f"| payoff | level | format | true log edge | coverage |\n|---|---|---|---|---|\n{table}\n",
        encoding="utf-8",
    )
    print(f"pooled {pooled:.4f}, cells {worst:.3f} to {best:.3f}")


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
