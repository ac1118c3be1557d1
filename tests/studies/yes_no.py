"""Yes/no payoffs never give false certainty: digital payoffs whose corrections are so rare that a sample misses them.

Run as a program it writes reports/yes_no.md: geometric Brownian motion (Euler), a digital payoff, cost ratio 1/2, split
over float64 against float64 alone. bfloat16 on level 2 with strike 1.8 has a true edge of about .8, float16 on level 3
with strike 1.6 of about .9: neither pays. Each seed is audited with looks at 32,768 paths, twice that ... up to 2^20.
Beside it stands what a plain jackknife would have said at the first look. float32, whose edge is 2, is audited with its
first look at 2^20 paths: nothing smaller can prove that a correction never seen is rare enough.
"""

from __future__ import annotations

import sys
from collections import Counter
from pathlib import Path

import numpy as np

from narrowgauge.conduct.run import run
from narrowgauge.judge.asked import level_costs
from narrowgauge.judge.gain import LevelView, Scheme
from narrowgauge.judge.intervals import jackknife
from narrowgauge.kernel.auditfile import AuditFile, audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner

CASES = (("bfloat16", 2, 1.8), ("float16", 3, 1.6))
FIRST_LOOK, LAST_LOOK = 2**15, 2**20


def digital(dW, h, strike, rate=0.05, volatility=0.2):
    """Whether a geometric Brownian path, Euler from 1, ends above the strike."""
    S = np.full(dW.shape[1], 1.0)
    for dw in dW:
        S = S + (rate * h * S + volatility * S * dw)
    return S > strike


def audit_file(name: str, level: int, strike: float, seed: int, paths: int) -> AuditFile:
    """Return the audit of one format on the ladder that starts at one level, so that it is the only one with R."""
    return audit_file_from(
        {
            "kernel": {"run": digital, "takes": "increments"},
            "parameters": {"strike": strike},
            "ladder": {"horizon": 1.0, "finest": level},
            "formats": {"narrow": [name], "wide": ["float64"], "schemes": ["split"]},
            "cost": {"float64": 1.0, "float32": 0.5, "float16": 0.5, "bfloat16": 0.5},
            "sampling": {"paths": paths, "most_paths": LAST_LOOK, "seed": seed},
        }
    )


def verdict(name: str, level: int, strike: float, seed: int, paths: int = FIRST_LOOK) -> tuple[str, int]:
    """Return the verdict on one level, and the paths it took, by the looks of an audit."""
    file = audit_file(name, level, strike, seed, paths)
    # Only the level in question: the others are settled at once by asking nothing of them.
    outcome = run(file, find_kernel(file), settled=lambda j: j.level != level or j.settled)
    return outcome.judgements[level].arms["value"][name].verdict, outcome.tallies[level].paths


def plainly(name: str, level: int, strike: float, seed: int, alpha: float) -> bool:
    """Return whether a plain jackknife of the first look would say that the format pays."""
    file = audit_file(name, level, strike, seed, FIRST_LOOK)
    tally = BlockRunner(file, find_kernel(file)).run(level, 0)
    view = LevelView(tally.quantities["value"], level_costs(file, level), None)
    own, rival = Scheme(kind="split", narrow=name, wide="float64"), Scheme(kind="alone", narrow="float64")
    with np.errstate(all="ignore"):
        interval = jackknife(view.logarithm(rival) - view.logarithm(own), alpha)
    return bool(interval.low > 0)


def main(seeds: int = 400) -> None:
    """Run the study and write its output."""
    lines = ["| format | level | strike | pays | does not pay | undecided | plain jackknife pays |", "|---" * 7 + "|"]
    for name, level, strike in CASES:
        found = Counter(verdict(name, level, strike, seed)[0] for seed in range(1, seeds + 1))
        plain = sum(plainly(name, level, strike, seed, 0.01) for seed in range(1, seeds + 1))
        row = [name, level, strike, found["pays"], found["does not pay"], found["undecided"], f"{plain / seeds:.1%}"]
        lines.append("| " + " | ".join(map(str, row)) + " |")
        print(lines[-1], flush=True)
    for _, level, strike in CASES:
        found = Counter(verdict("float32", level, strike, seed, LAST_LOOK)[0] for seed in range(1, seeds + 1))
        row = ["float32", level, strike, found["pays"], found["does not pay"], found["undecided"], "-"]
        lines.append("| " + " | ".join(map(str, row)) + " |")
        print(lines[-1], flush=True)
    text = (__doc__ or "").split(chr(10), 2)[2].strip()
    (Path(__file__).parents[2] / "reports" / "yes_no.md").write_text(
        f"# Yes/no payoffs\n\n{text}\n\n{seeds} seeds a row. Made by `python tests/studies/yes_no.py`.\n\n"
        + "\n".join(lines)
        + "\n",
        encoding="utf-8",
    )


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
