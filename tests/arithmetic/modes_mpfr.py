"""Compare every mode of every format with MPFR on as many random pairs as asked for, compiled and not.

A program, not a test: the tests ask about 20,000 pairs; the issue asks for a million. Run it after a change in
`narrowgauge.arithmetic`:

    python tests/arithmetic/modes_mpfr.py --pairs 1000000 > reports/arithmetic_modes_mpfr.txt

Bit for bit, signed zeros told apart and all NaNs alike: + - * / and the square root, fused multiply-add (a random third
operand, and one that nearly cancels the product), in all seven formats to nearest, toward zero, up and down; stochastic
rounding, which must give MPFR's rounding down or up; on all pairs of some 600 edge values (256 in 8 bits) and on random
pairs, in float64 also on those of close exponents alone; every input of every function of one operand in the formats of
8 and 16 bits; functions of two operands on a tenth of the pairs. Each result is computed twice, by the compiled loops
and by NumPy alone, and both are compared. Ends with exit code 1 if a single bit differs.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable, Iterable
from typing import Any

import gmpy2  # type: ignore[import-untyped, import-not-found, unused-ignore]  # comes without annotations
import mpfr_oracle as oracle
import numpy as np
from full_mpfr import SEED, TWO_OPERANDS, chunks

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.stochastic import Stochastic

Counts = dict[tuple[str, str], list[int]]
Pair = tuple[oracle.Doubles, oracle.Doubles]


def twice(compute: Callable[[], Any]) -> list[Any]:
    """Return what the loops compute and what NumPy alone computes."""
    kernel = compiled.kernel
    found = [compute()]
    compiled.kernel = lambda name: None
    try:
        found.append(compute())
    finally:
        compiled.kernel = kernel
    return found


def fused(name: str, rounding: Any, *triple: oracle.Doubles) -> Any:
    """Return x y + z as the program computes it."""
    mode: dict[str, Any] = {"stream": Stochastic(1, 2, 3)} if rounding == "stochastic" else {}
    arithmetic = Arithmetic(format=FORMATS[name], rounding=rounding, fused=True, **mode)
    with np.errstate(all="ignore"):
        return arithmetic.fma(*(operand.astype(arithmetic.format.carrier) for operand in triple))


def single(name: str, function: str, rounding: str, *operands: oracle.Doubles) -> Any:
    """Return an operation as the program computes it, with a new stream where one is needed."""
    mode: dict[str, Any] = {"stream": Stochastic(1, 2, 3)} if rounding == "stochastic" else {}
    return oracle.computed(name, function, *operands, rounding=rounding, **mode)


def tally(counts: Counts, label: str, wants: dict[str, oracle.Doubles], compute: Callable[[str], Any]) -> None:
    """Compare one operation in every mode and add up; stochastic results must be one of the two neighbours."""
    for rounding, want in wants.items():
        entry = counts.setdefault((label, rounding), [0, 0])
        for found in twice(lambda rounding=rounding: compute(rounding)):
            entry[0] += want.size
            entry[1] += oracle.differ(found, want).size
    entry = counts.setdefault((label, "stochastic"), [0, 0])
    for found in twice(lambda: compute("stochastic")):
        entry[0] += found.size
        entry[1] += np.intersect1d(oracle.differ(found, wants["down"]), oracle.differ(found, wants["up"])).size


def operations(name: str, source: Iterable[Pair], functions: dict[str, tuple[str, int]], *, fma: bool) -> Counts:
    """Return, by operation and mode, how many results were compared and how many differed."""
    counts: Counts = {}
    forms = {rounding: oracle.context(name, rounding) for rounding in oracle.MODES}
    for pair in source:
        numbers = [oracle.to_mpfr(operand, name) for operand in pair]
        for function, (theirs, count) in functions.items():
            wants = {
                rounding: oracle.fitted(oracle.reckon(getattr(form, theirs), *numbers[:count]), name, rounding)
                for rounding, form in forms.items()
            }
            tally(counts, function, wants, lambda r, f=function, k=count, p=pair: single(name, f, r, *p[:k]))
        if fma:
            half = pair[0].size // 2
            product = -oracle.fitted(oracle.reckon(forms["nearest"].mul, *numbers), name)
            third = np.where(np.arange(pair[0].size) < half, np.roll(pair[0], 1), product)
            triple = [*numbers, oracle.to_mpfr(third, name)]
            wants = {r: oracle.fitted(oracle.reckon(form.fma, *triple), name, r) for r, form in forms.items()}
            tally(counts, "fma", wants, lambda r, t=(*pair, third): fused(name, r, *t))
    return counts


def inputs(name: str) -> Counts:
    """Return the same for all inputs of the functions of one operand."""
    values = oracle.all_values(name)
    numbers = oracle.to_mpfr(values, name)
    counts: Counts = {}
    for function in [ufunc.__name__ for ufunc, way in WAYS.items() if way == "table"] + ["square", "reciprocal"]:
        wants = {rounding: oracle.unary(function, numbers, name, rounding) for rounding in oracle.MODES}
        tally(counts, function, wants, lambda r, f=function: single(name, f, r, values))
    return counts


def report(name: str, kind: str, counts: Counts) -> int:
    """Print one line an operation and mode, and return how many results differed."""
    for (function, rounding), (compared, differing) in counts.items():
        print(f"{name:9} {function:11} {rounding:11} {kind:13} {compared:11,} {differing:9,}", flush=True)
    return sum(differing for _, differing in counts.values())


def main() -> int:
    """Compare and print; return the exit code."""
    parser = argparse.ArgumentParser(description="Compare every mode of the arithmetic with MPFR.")
    parser.add_argument("--pairs", type=int, default=1_000_000, help="random pairs, an operation, mode and format")
    pairs = parser.parse_args().pairs
    print(f"{gmpy2.mpfr_version()}, gmpy2 {gmpy2.version()}, NumPy {np.__version__}; random pairs from seed {SEED} on")
    print(f"compiled loops: {compiled.note() or 'yes'}; each result is compared twice, with and without them\n")
    print(f"{'format':9} {'function':11} {'rounding':11} {'inputs':13} {'compared':>11} {'different':>9}")
    different = 0
    for name in oracle.ALL:
        edges = [oracle.all_pairs(oracle.edge_values(name))]
        different += report(name, "edge pairs", operations(name, edges, oracle.BASIC, fma=True))
        different += report(name, "random pairs", operations(name, chunks(name, pairs), oracle.BASIC, fma=True))
        if name == "float64":  # without the wild patterns every number is moderate, and the loops do it all
            close = ((left[left.size // 2 :], right[right.size // 2 :]) for left, right in chunks(name, 2 * pairs))
            different += report(name, "close pairs", operations(name, close, oracle.BASIC, fma=False))
        if name not in ("float32", "float64"):
            few = chunks(name, pairs // 10)
            different += report(name, "random pairs", operations(name, few, TWO_OPERANDS, fma=False))
        if FORMATS[name].bits <= 16:
            different += report(name, "every input", inputs(name))
    print(f"\n{different:,} results differ from MPFR's.")
    return 1 if different else 0


if __name__ == "__main__":
    sys.exit(main())
