"""Compare every operation with MPFR on as many random pairs as asked for, and print how many differ.

A program, not a test: the tests ask about a million pairs for the five basic operations and a quarter of that
for functions of two operands; this one takes any number. Run it after a change in `narrowgauge.arithmetic`:

    python tests/arithmetic/full_mpfr.py --pairs 10000000 > reports/arithmetic_mpfr.txt

It compares, bit for bit, signed zeros told apart and all NaNs alike: + - * / and the square root in all four
formats, on all pairs of some 600 edge values and on random pairs (half of them random patterns, half of close
exponents); every input of every function of one operand in the 16-bit formats; power, arctan2, hypot and fmod in
the 16-bit formats on the same kinds of pairs. Ends with exit code 1 if a single bit differs.
"""

from __future__ import annotations

import argparse
import importlib
import platform
import sys
from collections.abc import Iterator

import gmpy2  # type: ignore[import-untyped, import-not-found, unused-ignore]  # comes without annotations
import mpfr_oracle as oracle
import numpy as np

from narrowgauge.arithmetic.elementary import WAYS

CHUNK = 250_000
SEED = 20_260_101
TWO_OPERANDS = {"power": ("pow", 2), "arctan2": ("atan2", 2), "hypot": ("hypot", 2), "fmod": ("fmod", 2)}


def chunks(name: str, pairs: int) -> Iterator[tuple[oracle.Doubles, oracle.Doubles]]:
    """Yield random pairs in pieces that fit in memory; piece k comes from seed SEED + k."""
    for number, done in enumerate(range(0, pairs, CHUNK)):
        yield oracle.random_pairs(name, min(CHUNK, pairs - done), SEED + number)


def count(
    name: str, functions: dict[str, tuple[str, int]], source: Iterator[tuple[oracle.Doubles, oracle.Doubles]]
) -> dict[str, tuple[int, int]]:
    """Return, by function, how many pairs were compared and how many results differed."""
    form = oracle.context(name)
    found = dict.fromkeys(functions, (0, 0))
    for pair in source:
        numbers = [oracle.to_mpfr(operand, name) for operand in pair]
        for function, (theirs, operands) in functions.items():
            want = oracle.reckon(getattr(form, theirs), *numbers[:operands])
            wrong = oracle.differ(oracle.computed(name, function, *pair[:operands]), want).size
            compared, differing = found[function]
            found[function] = compared + want.size, differing + wrong
    return found


def one_operand(name: str) -> dict[str, tuple[int, int]]:
    """Return the same for all 65,536 inputs of the functions of one operand."""
    values = oracle.all_values(name)
    numbers = oracle.to_mpfr(values, name)
    functions = [ufunc.__name__ for ufunc, way in WAYS.items() if way == "table"] + ["square", "reciprocal", "sqrt"]
    return {
        function: (
            values.size,
            oracle.differ(oracle.computed(name, function, values), oracle.unary(function, numbers, name)).size,
        )
        for function in functions
    }


def report(name: str, inputs: str, counted: dict[str, tuple[int, int]]) -> int:
    """Print one line a function and return how many results differed."""
    for function, (compared, differing) in counted.items():
        print(f"{name:9} {function:11} {inputs:13} {compared:11,} {differing:9,}", flush=True)
    return sum(differing for _, differing in counted.values())


def main() -> int:
    """Compare and print; return the exit code."""
    parser = argparse.ArgumentParser(description="Compare the arithmetic with MPFR.")
    parser.add_argument("--pairs", type=int, default=1_000_000, help="random pairs, an operation and format")
    pairs = parser.parse_args().pairs
    numpy_core = importlib.import_module("numpy._core._multiarray_umath")
    enabled = [feature for feature in numpy_core.__cpu_dispatch__ if numpy_core.__cpu_features__[feature]]
    print(f"Python {platform.python_version()}, NumPy {np.__version__} on {platform.machine()}", *enabled)
    print(f"{gmpy2.mpfr_version()}, gmpy2 {gmpy2.version()}; random pairs from seed {SEED} on\n")
    print(f"{'format':9} {'function':11} {'inputs':13} {'compared':>11} {'different':>9}")
    different = 0
    for name in oracle.NAMES:
        functions = {**oracle.BASIC, **(TWO_OPERANDS if name in oracle.SIXTEEN_BITS else {})}
        edges = iter([oracle.all_pairs(oracle.edge_values(name))])
        different += report(name, "edge pairs", count(name, functions, edges))
        different += report(name, "random pairs", count(name, functions, chunks(name, pairs)))
        if name in oracle.SIXTEEN_BITS:
            different += report(name, "every input", one_operand(name))
    print(f"\n{different:,} results differ from MPFR's.")
    return 1 if different else 0


if __name__ == "__main__":
    sys.exit(main())
