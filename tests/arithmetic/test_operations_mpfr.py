"""+ - * / and the square root in all four formats against MPFR, bit for bit; MPFR against exact rationals."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from math import isfinite
from typing import Any

import gmpy2  # type: ignore[import-untyped, import-not-found, unused-ignore]  # comes without annotations
import mpfr_oracle as oracle
import numpy as np
import pytest

RANDOM_PAIRS = 1_000_000


def disagreements(name: str, left: oracle.Doubles, right: oracle.Doubles) -> dict[str, list[Any]]:
    """Return, by operation, the first operands on which the program and MPFR differ in a bit."""
    form, found = oracle.context(name), {}
    values = (left, right)
    numbers = tuple(oracle.to_mpfr(operand, name) for operand in values)
    for function, (theirs, count) in oracle.BASIC.items():
        want = oracle.reckon(getattr(form, theirs), *numbers[:count])
        bad = oracle.differ(oracle.computed(name, function, *values[:count]), want)
        if bad.size:
            found[function] = [bad.size, *((left[i], right[i], want[i]) for i in bad[:3])]
    return found


@pytest.mark.parametrize(("name", "bits"), [("float16", 16), ("float32", 32), ("float64", 64)])
def test_the_contexts_are_those_of_the_standard(name: str, bits: int) -> None:
    """The contexts made here by hand, as bfloat16 needs, are gmpy2's own where it has one."""
    assert repr(oracle.context(name)) == repr(gmpy2.ieee(bits))


@pytest.mark.parametrize("name", oracle.NAMES)
def test_mpfr_rounds_as_exact_rationals_do(name: str) -> None:
    """On 10,000 pairs the reference itself equals integer arithmetic on the exact result."""
    form = oracle.context(name)
    edges = oracle.edge_values(name)
    generator = np.random.default_rng(7)
    left, right = generator.choice(edges, (2, 5_000))
    more = oracle.random_pairs(name, 5_000, seed=8)
    exact: dict[str, Callable[[Fraction, Fraction], Fraction]] = {
        "add": lambda x, y: x + y,
        "subtract": lambda x, y: x - y,
        "multiply": lambda x, y: x * y,
        "divide": lambda x, y: x / y,
    }
    compared = 0
    for x, y in zip(np.append(left, more[0]).tolist(), np.append(right, more[1]).tolist(), strict=True):
        if not (isfinite(x) and isfinite(y) and y):
            continue
        for function, operation in exact.items():
            want = oracle.exactly(operation(Fraction(x), Fraction(y)), name)
            assert float(getattr(form, oracle.BASIC[function][0])(x, y)) == want, (function, x, y)
            compared += 1
    assert compared > 35_000


@pytest.mark.parametrize("name", oracle.NAMES)
def test_edge_values_are_what_they_claim(name: str) -> None:
    """600 to 660 distinct values of the format: zeros, infinities, NaN, and both ends of each range."""
    edges = oracle.edge_values(name)
    assert 600 <= edges.size <= 660
    assert np.unique(edges.view(np.uint64)).size == edges.size
    assert oracle.differ(oracle.reckon(float, oracle.to_mpfr(edges, name)), edges).size == 0
    precision, emax, _ = oracle.SHAPES[name]
    largest, normal = (2 - 2.0 ** (1 - precision)) * 2.0**emax, 2.0 ** (1 - emax)
    least = normal * 2.0 ** (1 - precision)
    for value in (
        0.0,
        least,
        normal - least,
        normal,
        1 - 2.0**-precision,
        1 + 2.0 ** (1 - precision),
        largest,
    ):
        assert {value, -value} <= set(edges.tolist())
    assert np.signbit(edges[edges == 0]).tolist() == [False, True]


@pytest.mark.parametrize("name", oracle.NAMES)
def test_operations_equal_mpfr_on_all_pairs_of_edge_values(name: str) -> None:
    """+ - * / and the square root give MPFR's bits on every pair of edge values, 361,201 pairs or more."""
    assert disagreements(name, *oracle.all_pairs(oracle.edge_values(name))) == {}


@pytest.mark.parametrize("name", oracle.NAMES)
def test_operations_equal_mpfr_on_a_million_random_pairs(name: str) -> None:
    """+ - * / and the square root give MPFR's bits on half a million wild and half a million close pairs."""
    assert disagreements(name, *oracle.random_pairs(name, RANDOM_PAIRS, seed=20_250_602)) == {}


@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_an_unrounded_carrier_does_not_pass(name: str) -> None:
    """Negative control: the same operations left in float32 differ from MPFR in every operation."""
    left, right = oracle.random_pairs(name, 10_000, seed=20_250_602)
    form = oracle.context(name)
    numbers = [oracle.to_mpfr(operand, name) for operand in (left, right)]
    for function, (theirs, count) in oracle.BASIC.items():
        with np.errstate(all="ignore"):
            raw = getattr(np, function)(*(operand.astype(np.float32) for operand in (left, right)[:count]))
        assert oracle.differ(raw, oracle.reckon(getattr(form, theirs), *numbers[:count])).size > 1000


@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_ties_away_from_zero_do_not_pass(name: str) -> None:
    """Negative control: a rounding that differs in exact ties only is told apart on the edge pairs."""
    precision = oracle.SHAPES[name][0]
    left, right = oracle.all_pairs(oracle.edge_values(name))
    keep = np.isfinite(left) & np.isfinite(right)
    left, right = left[keep], right[keep]
    with np.errstate(all="ignore"):
        product = (left.astype(np.float32) * right.astype(np.float32)).view(np.uint32)
    half = np.uint32(1 << (23 - precision))
    away = ((product + half) & ~np.uint32((1 << (24 - precision)) - 1)).view(np.float32)
    want = oracle.reckon(oracle.context(name).mul, *(oracle.to_mpfr(v, name) for v in (left, right)))
    normal = (np.abs(want) > 2.0 ** (2 - oracle.SHAPES[name][1])) & np.isfinite(want)
    wrong = oracle.differ(away[normal], want[normal])
    assert 0 < wrong.size < 0.1 * np.count_nonzero(normal)
