"""Rounding from float64 and from integers of any size, against MPFR and exact rationals."""

from __future__ import annotations

from fractions import Fraction
from math import copysign, inf, isnan, nan

import mpfr_oracle as oracle
import numpy as np
import pytest

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.rounding import narrow, narrow_integer, narrow_number, round_carrier

NARROW = ("float16", "bfloat16", "float32")


def in_range(name: str, count: int, seed: int) -> oracle.Doubles:
    """Return float64 values of random significands from far below the subnormals to beyond the largest finite."""
    precision, emax, _ = oracle.SHAPES[name]
    generator = np.random.default_rng(seed)
    exponents = generator.integers(-emax - precision - 2, emax + 2, count)
    signs = generator.choice([-1.0, 1.0], count)
    return np.ldexp(signs * generator.uniform(1.0, 2.0, count), exponents)


def midpoints(name: str) -> tuple[oracle.Doubles, oracle.Doubles, oracle.Doubles]:
    """Return neighbouring values from zero to 2^(emax + 1), and what lies halfway between, exactly.

    All of a 16-bit format, 100,000 at random of binary32.
    """
    precision, emax, bits = oracle.SHAPES[name]
    last = ((2 * emax + 1) << (precision - 1)) - 1
    if bits == 16:
        lower = np.arange(last + 1, dtype=np.uint64)
    else:
        lower = np.append(np.random.default_rng(3).integers(0, last, 100_000, dtype=np.uint64), np.uint64(last))
    low, high = oracle.values_of(lower, name), oracle.values_of(lower + np.uint64(1), name)
    high = np.where(np.isinf(high), 2.0 ** (emax + 1), high)
    return low, high, low + (high - low) / 2


@pytest.mark.parametrize("name", oracle.NAMES)
def test_random_bit_patterns_are_rounded_as_mpfr_does(name: str) -> None:
    """200,000 float64 patterns of any kind, NaNs among them, give MPFR's bits in the carrier's type."""
    patterns = np.random.default_rng(1).integers(0, 2**64 - 1, 200_000, dtype=np.uint64, endpoint=True)
    values = patterns.view(np.float64)
    found = narrow(values, FORMATS[name])
    assert found.dtype == FORMATS[name].carrier
    assert oracle.differ(found, oracle.reckon(float, oracle.to_mpfr(values, name))).size == 0


@pytest.mark.parametrize("name", NARROW)
def test_values_in_range_are_rounded_as_mpfr_does(name: str) -> None:
    """200,000 values around the format's range, a share of them subnormal, give MPFR's bits."""
    values = in_range(name, 200_000, seed=2)
    small = np.abs(values) < FORMATS[name].min_normal
    assert np.count_nonzero(small) > 5000
    want = oracle.reckon(float, oracle.to_mpfr(values, name))
    assert oracle.differ(narrow(values, FORMATS[name]), want).size == 0


@pytest.mark.parametrize("name", NARROW)
def test_values_in_range_are_rounded_as_exact_rationals_are(name: str) -> None:
    """2,000 of them, and the same once more as single numbers, equal integer arithmetic: a second reference."""
    values = in_range(name, 2_000, seed=4)
    want = np.array([oracle.exactly(Fraction(value), name) for value in values.tolist()])
    want = np.copysign(want, values)
    assert oracle.differ(narrow(values, FORMATS[name]), want).size == 0
    single = np.array([narrow_number(value, FORMATS[name]) for value in values.tolist()])
    assert oracle.differ(single, want).size == 0


@pytest.mark.parametrize("sign", [1.0, -1.0])
@pytest.mark.parametrize("name", NARROW)
def test_midpoints_go_to_the_even_neighbour_and_nothing_else_does(name: str, sign: float) -> None:
    """Halfway exactly the even pattern wins; one float64 beside it the nearer value does, all over the range."""
    low, high, middle = midpoints(name)
    form = FORMATS[name]
    top = np.where(high > form.max_finite, inf, high)
    # The storage type's own conversion is exact here: these are its values.
    even = low.astype(form.storage).view(np.uint16 if form.bits == 16 else np.uint32) % 2 == 0
    want = np.where(even, low, top)
    assert oracle.differ(narrow(sign * middle, form), sign * want).size == 0
    assert oracle.differ(narrow(sign * np.nextafter(middle, 0.0), form), sign * low).size == 0
    assert oracle.differ(narrow(sign * np.nextafter(middle, inf), form), sign * top).size == 0


def test_a_number_is_rounded_once() -> None:
    """1 + 2^-11 + 2^-30 and 1 + 2^-8 + 2^-40 round up; through float32 both would be 1.0 (negative control).

    Computed from first principles: each lies just above a midpoint that float32 rounds it to.
    """
    for name, number, right in (
        ("float16", 1 + 2.0**-11 + 2.0**-30, 1.0009765625),
        ("bfloat16", 1 + 2.0**-8 + 2.0**-40, 1.0078125),
    ):
        form = FORMATS[name]
        assert narrow(np.array([number]), form)[0] == right
        assert narrow_number(number, form) == right
        assert round_carrier(np.array([number], np.float32), form)[0] == 1.0


def test_the_largest_finite_binary16_ends_at_65520() -> None:
    """65504 is the largest finite binary16 and 65520 rounds to infinity: IEEE 754-2019, recalled from memory."""
    form = FORMATS["float16"]
    assert narrow(np.array([65504.0, np.nextafter(65520.0, 0), 65520.0]), form).tolist() == [65504, 65504, inf]
    assert round_carrier(np.array([65519.99, 65520.0, -65520.0], np.float32), form).tolist() == [65504, inf, -inf]


@pytest.mark.parametrize("name", oracle.NAMES)
def test_narrow_returns_a_new_array_and_leaves_its_argument_alone(name: str) -> None:
    """The argument keeps its bits, the result shares no memory with it, also where nothing is rounded."""
    values = in_range("float16", 1000, seed=5)
    before = values.copy()
    found = narrow(values, FORMATS[name])
    assert not np.shares_memory(found, values)
    assert np.array_equal(values.view(np.uint64), before.view(np.uint64))


@pytest.mark.parametrize("name", oracle.NAMES)
@pytest.mark.parametrize("bits", [0x7FF8 << 48, 0xFFF8 << 48, (1 << 63) - 1, (1 << 64) - 1, (0x7FF << 52) + 1])
def test_every_nan_stays_one(name: str, bits: int) -> None:
    """Either sign, any payload, all ones (which an addition to the bits would turn into zero), signalling."""
    value = np.array([bits], np.uint64).view(np.float64)
    for values in (value, np.append(value, 1.0), np.append(1e-5, value), value.reshape(())):
        found = narrow(values, FORMATS[name])
        assert np.array_equal(np.isnan(found), np.isnan(values))
    assert isnan(narrow_number(nan, FORMATS[name]))


@pytest.mark.parametrize("name", oracle.NAMES)
def test_infinities_and_zeros_keep_their_signs(name: str) -> None:
    """+-infinity and +-0 are values of every format, for arrays and for numbers."""
    form = FORMATS[name]
    for value in (inf, -inf, 0.0, -0.0):
        found = float(narrow(np.array([value]), form)[0])
        assert (found, copysign(1.0, found)) == (value, copysign(1.0, value))
        number = narrow_number(value, form)
        assert (number, copysign(1.0, number)) == (value, copysign(1.0, value))
    tiny = form.min_subnormal / 2 if name != "float64" else 0.0
    assert np.signbit(narrow(np.array([-tiny, tiny]), form)).tolist() == [True, False]


@pytest.mark.parametrize("name", oracle.NAMES)
def test_integers_of_any_size_are_rounded_once(name: str) -> None:
    """Random integers to 2^1200, and 1 beside midpoints that float64 cannot tell, equal exact rationals."""
    precision = oracle.SHAPES[name][0]
    generator = np.random.default_rng(6)
    numbers = [0, 1, 2**53, 2**53 + 1, 2**54 - 1, 2**1024, 2**1024 - 2**970, 2**1024 - 2**970 - 1, 10**400]
    for _ in range(1000):
        width = int(generator.integers(1, 1200))
        numbers.append(int.from_bytes(generator.bytes(150), "big") >> (1200 - width))
    for _ in range(1000):
        middle = 2 * int(generator.integers(2 ** (precision - 1), 2**precision)) + 1
        shift = int(generator.integers(1, 120))
        numbers.extend((middle << shift) + step for step in (-1, 0, 1))
    for number in numbers:
        want = oracle.exactly(Fraction(number), name)
        assert narrow_integer(number, FORMATS[name]) == want, number
        assert narrow_integer(-number, FORMATS[name]) == -want, -number


def test_an_integer_beside_a_midpoint_is_not_rounded_through_float64() -> None:
    """2^70 + 2^62 + 1 lies above a midpoint of bfloat16; negative control: float64 drops the 1 and gets 2^70."""
    number = 2**70 + 2**62 + 1
    form = FORMATS["bfloat16"]
    assert narrow_integer(number, form) == 2**70 + 2**63
    assert narrow_number(float(number), form) == 2**70
