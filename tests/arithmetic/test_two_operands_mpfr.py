"""Functions of two operands in the 16-bit formats against MPFR and exact integers, bit for bit."""

from __future__ import annotations

from itertools import product
from typing import Any

import gmpy2  # type: ignore[import-untyped, import-not-found, unused-ignore]  # comes without annotations
import mpfr_oracle as oracle
import numpy as np
import pytest

from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.rounding import narrow

MPFR = {"power": "pow", "float_power": "pow", "arctan2": "atan2", "hypot": "hypot", "fmod": "fmod"}
RATIONAL = ("remainder", "floor_divide")
LOGARITHMS = oracle.LOGARITHMS
RANDOM_PAIRS = 250_000


def wrong_pairs(name: str, function: str, left: oracle.Doubles, right: oracle.Doubles) -> list[Any]:
    """Return the first operands on which the program and MPFR's function differ in a bit."""
    numbers = oracle.to_mpfr(left, name), oracle.to_mpfr(right, name)
    want = oracle.reckon(getattr(oracle.context(name), MPFR[function]), *numbers)
    bad = oracle.differ(oracle.computed(name, function, left, right), want)
    return [(left[i], right[i], want[i]) for i in bad[:5]]


def test_every_function_computed_in_float64_is_tested_here() -> None:
    """The table's functions of two operands and these tests name the same ones."""
    wide = {ufunc.__name__ for ufunc, way in WAYS.items() if way == "wide"}
    assert wide == {*MPFR, *RATIONAL, *LOGARITHMS, "heaviside"} - {"fmod"}


@pytest.mark.parametrize("function", list(MPFR))
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_all_pairs_of_edge_values_give_mpfrs_bits(name: str, function: str) -> None:
    """Every pair of some 600 edge values is rounded correctly, zeros, infinities and NaN as the C standard says."""
    assert wrong_pairs(name, function, *oracle.all_pairs(oracle.edge_values(name))) == []


@pytest.mark.parametrize("function", list(MPFR))
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_random_pairs_give_mpfrs_bits(name: str, function: str) -> None:
    """A quarter of a million random pairs are rounded correctly.

    A float64 result within one unit of a midpoint of the format is expected for fewer than one pair in 2^40:
    power, hypot and arctan2 are right here although nobody has proved them for all 2^32 pairs.
    """
    assert wrong_pairs(name, function, *oracle.random_pairs(name, RANDOM_PAIRS, seed=20_250_603)) == []


@pytest.mark.parametrize("exponent", [2.0, 3.0, 4.0, 0.5, 1.5, -0.5, -1.0, -2.0, 10.0])
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_powers_of_every_value_give_mpfrs_bits(name: str, exponent: float) -> None:
    """The exponents that kernels use are right for all 65,536 bases, exact ties among them."""
    values = oracle.all_values(name)
    assert wrong_pairs(name, "power", values, np.full_like(values, exponent)) == []


@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_pythagorean_triples_halfway_between_values(name: str) -> None:
    """A hypotenuse that lies exactly halfway between two values goes to the even one."""
    precision = oracle.SHAPES[name][0]
    limit = 1 << (precision + 1)
    legs = [
        (m * m - n * n, 2 * m * n)
        for m, n in product(range(2, 1 << 7), repeat=2)
        if 0 < n < m and limit // 2 < m * m + n * n < limit and (m + n) % 2
    ]
    both = np.array([leg for leg in legs if all(oracle.exactly(gmpy2.mpq(x), name) == x for x in leg)], float)
    assert len(both) > 10
    halfway = np.hypot(both[:, 0], both[:, 1])
    assert (narrow(halfway, FORMATS[name]).astype(float) != halfway).all()
    for scale in (1.0, 2.0**-5, 2.0 ** (2 - oracle.SHAPES[name][1] - precision)):
        left, right = np.ascontiguousarray(both.T * scale)
        assert wrong_pairs(name, "hypot", left, -right) == []
        assert wrong_pairs(name, "hypot", right, left) == []


def test_arctangents_of_quotients_halfway_between_subnormals() -> None:
    """arctan2 of bfloat16 lies a third of a cube below such a quotient, invisible in float64, and rounds down.

    Negative control: NumPy's float64 arctan2, rounded as it is, goes up in every second case.
    """
    odd = np.arange(1, 254, 2)
    quotients = [(m, x) for m in (1, 3, 5) for x in range(1, 120, 7)]
    left = np.concatenate([np.ldexp(odd[m * odd < 256] * m, x - 134) for m, x in quotients]).astype(float)
    right = np.concatenate([np.full(np.count_nonzero(m * odd < 256), m * 2.0**x) for m, x in quotients])
    for sign, other in product((1, -1), repeat=2):
        assert wrong_pairs("bfloat16", "arctan2", sign * left, other * right) == []
    numbers = oracle.to_mpfr(left, "bfloat16"), oracle.to_mpfr(right, "bfloat16")
    want = oracle.reckon(oracle.context("bfloat16").atan2, *numbers)
    plain = oracle.differ(narrow(np.arctan2(left, right), FORMATS["bfloat16"]), want)
    assert 0.45 * left.size < plain.size < 0.55 * left.size


def integers(values: oracle.Doubles, name: str) -> tuple[list[int], int]:
    """Return finite values of a format as multiples of its smallest number, and that number's exponent."""
    precision, emax, _ = oracle.SHAPES[name]
    exponent = 2 - emax - precision
    return [int(gmpy2.mpz(gmpy2.mpq(value) * gmpy2.mpq(2) ** -exponent)) for value in values.tolist()], exponent


def rational(function: str, name: str, left: oracle.Doubles, right: oracle.Doubles) -> oracle.Doubles:
    """Return remainder or floor_divide of finite numbers: floors of exact integers, rounded once.

    A zero remainder has the divisor's sign, a zero quotient that of the exact quotient.
    """
    (many, exponent), (few, _) = integers(left, name), integers(right, name)
    form = oracle.context(name)
    exact = gmpy2.context(precision=2000)
    if function == "floor_divide":
        whole, unit, zero = [m // d for m, d in zip(many, few, strict=True)], 1.0, np.copysign(0.0, left / right)
    else:
        whole, unit, zero = [m % d for m, d in zip(many, few, strict=True)], 2.0**exponent, np.copysign(0.0, right)
    found = np.array([float(form.plus(exact.mul(gmpy2.mpz(number), unit))) for number in whole])
    return np.where(found == 0, zero, found)


@pytest.mark.parametrize("function", RATIONAL)
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_remainders_and_floors_of_quotients_are_exact_ones_rounded_once(name: str, function: str) -> None:
    """On finite edge pairs and 20,000 random pairs the result is that of integer arithmetic."""
    left, right = (
        np.append(edge, random)
        for edge, random in zip(
            oracle.all_pairs(oracle.edge_values(name)[::2]), oracle.random_pairs(name, 20_000, 9), strict=True
        )
    )
    keep = np.isfinite(left) & np.isfinite(right) & (right != 0)
    left, right = left[keep], right[keep]
    bad = oracle.differ(oracle.computed(name, function, left, right), rational(function, name, left, right))
    assert [(left[i], right[i]) for i in bad[:5]] == []


@pytest.mark.parametrize("function", [*RATIONAL, "fmod", "heaviside"])
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_special_operands_are_treated_as_numpys_float16_does(name: str, function: str) -> None:
    """Zeros, infinities and NaN give what NumPy's own half precision gives for them."""
    left, right = oracle.all_pairs(np.array([0.0, -0.0, 1.0, -2.0, np.inf, -np.inf, np.nan]))
    with np.errstate(all="ignore"):
        want = getattr(np, function)(left.astype(np.float16), right.astype(np.float16)).astype(np.float64)
    assert oracle.differ(oracle.computed(name, function, left, right), want).size == 0


@pytest.mark.parametrize("function", LOGARITHMS)
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_logarithms_of_sums_are_rounded_correctly(name: str, function: str) -> None:
    """On edge pairs and 20,000 random pairs the result is the one of 400 bits, rounded once; NaN gives NaN."""
    left, right = (
        np.append(edge, random)
        for edge, random in zip(
            oracle.all_pairs(oracle.edge_values(name)[::4]), oracle.random_pairs(name, 20_000, 10), strict=True
        )
    )
    exact = oracle.logarithm_of_sum(function)
    form = oracle.context(name)
    numbers = (oracle.to_mpfr(operand, name) for operand in (left, right))
    want = oracle.reckon(lambda x, y: form.plus(exact(x, y)), *numbers)
    bad = oracle.differ(oracle.computed(name, function, left, right), want)
    assert [(left[i], right[i], want[i]) for i in bad[:5]] == []


@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_heaviside_selects(name: str) -> None:
    """0 below zero, 1 above, the second operand at a zero of either sign, NaN for NaN."""
    left, right = oracle.all_pairs(oracle.edge_values(name))
    want = np.select([np.isnan(left), left < 0, left > 0], [np.nan, 0.0, 1.0], default=right)
    assert oracle.differ(oracle.computed(name, "heaviside", left, right), want).size == 0
