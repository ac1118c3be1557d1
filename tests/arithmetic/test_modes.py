"""What surrounds the operations in each mode: casts, constants, single numbers, signs of zero, targets."""

from __future__ import annotations

from fractions import Fraction
from math import copysign, inf, isnan, nan
from typing import Any

import gmpy2  # type: ignore[import-untyped, import-not-found, unused-ignore]  # comes without annotations
import mpfr_oracle as oracle
import numpy as np
import pytest

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.rounding import narrow, narrow_integer, narrow_number
from narrowgauge.arithmetic.stochastic import Stochastic

DIRECTED: Any = ("zero", "up", "down")
every_format = pytest.mark.parametrize("name", oracle.ALL)
every_mode = pytest.mark.parametrize("rounding", list(oracle.MODES))


def around(name: str) -> oracle.Doubles:
    """Return float64 values around the range of a format, its own values, and what lies beside and between them."""
    form, generator = FORMATS[name], np.random.default_rng(61)
    low, high = form.emin - form.precision - 3, form.emax + 3
    edges = oracle.edge_values(name)[::3]
    with np.errstate(all="ignore"):
        random = np.ldexp(generator.uniform(-2.0, 2.0, 3000), generator.integers(low, high, 3000))
        beside = [np.nextafter(edges, side) for side in (-inf, inf)]
        return np.concatenate([random, edges, *beside, (edges[1:] + edges[:-1]) / 2, [0.0, -0.0, inf, -inf, nan]])


@every_mode
@every_format
def test_casts_and_single_numbers_are_rounded_once_in_the_mode(name: str, rounding: Any) -> None:
    """narrow, cast, narrow_number and constant give MPFR's rounding of a float64 number, zeros' signs included."""
    values = around(name)
    want = oracle.fitted(
        oracle.reckon(oracle.context(name, rounding).plus, oracle.to_mpfr(values, "float64")), name, rounding
    )
    if name == "float64":
        want = values
    arithmetic = Arithmetic(format=FORMATS[name], rounding=rounding)
    assert oracle.differ(narrow(values, FORMATS[name], rounding), want).size == 0
    assert oracle.differ(arithmetic.cast(values), want).size == 0
    single = [narrow_number(value, FORMATS[name], rounding) for value in values.tolist()]
    assert oracle.differ(np.array(single), want).size == 0
    assert oracle.differ(np.array([arithmetic.constant(value) for value in values.tolist()]), want).size == 0


@every_mode
@every_format
def test_integers_of_any_size_are_rounded_once_in_the_mode(name: str, rounding: Any) -> None:
    """Random integers to 2^1200 and beside midpoints, also as constants; too large ones by the mode."""
    generator = np.random.default_rng(62)
    precision = oracle.SHAPES[name][0]
    numbers = [1, 2**53 + 1, 2**54 - 1, 2**1024, 2**1024 - 2**970, 2**1024 - 2**970 - 1, 10**400]
    numbers += [int.from_bytes(generator.bytes(150), "big") >> (1200 - int(width)) for width in range(1, 1200, 7)]
    for shift in range(1, 120, 3):
        middle = 2 * int(generator.integers(2 ** (precision - 1), 2**precision)) + 1
        numbers.extend((middle << shift) + step for step in (-1, 0, 1))
    form = oracle.context(name, rounding)
    arithmetic = Arithmetic(format=FORMATS[name], rounding=rounding)
    for number in [sign * number for number in numbers for sign in (1, -1)]:
        exact = gmpy2.mpfr(number, 1400)
        want = oracle.fitted(np.array([float(form.plus(exact))]), name, rounding)
        found = narrow_integer(number, FORMATS[name], rounding)
        assert oracle.differ(np.array([found]), want).size == 0, number
        if name != "float64" or rounding != "nearest":  # float64 to nearest leaves an integer as it is
            assert oracle.differ(np.array([arithmetic.constant(number)]), want).size == 0, number


@every_mode
@every_format
def test_flushed_constants_and_casts_hold_no_subnormal(name: str, rounding: Any) -> None:
    """They are rounded first and become zeros of their sign then; the arithmetic holds no subnormal number."""
    values = around(name)
    arithmetic = Arithmetic(format=FORMATS[name], rounding=rounding, subnormals="flushed")
    kept = narrow(values, FORMATS[name], rounding).astype(np.float64)
    want = np.where(np.abs(kept) < FORMATS[name].min_normal, np.copysign(0.0, kept), kept)
    assert oracle.differ(arithmetic.cast(values), want).size == 0
    assert oracle.differ(np.array([arithmetic.constant(value) for value in values.tolist()]), want).size == 0
    assert arithmetic.holds(want[~np.isinf(want)])
    assert not arithmetic.holds(np.array([FORMATS[name].min_subnormal]))
    assert Arithmetic(format=FORMATS[name], rounding=rounding).holds(np.array([FORMATS[name].min_subnormal]))


@pytest.mark.parametrize("subnormals", ["kept", "flushed"])
@pytest.mark.parametrize("rounding", [*oracle.MODES, "stochastic"])
@every_format
def test_scalars_and_arrays_agree(name: str, rounding: Any, subnormals: Any) -> None:
    """A 0-d operand gives a scalar of the carrier's type with the bits of the array's element, by every way."""
    edges = oracle.edge_values(name)[::23]
    form = FORMATS[name]

    def arithmetic() -> Arithmetic:
        stream = Stochastic(1, 2, 3) if rounding == "stochastic" else None
        return Arithmetic(format=form, rounding=rounding, subnormals=subnormals, stream=stream)

    with np.errstate(all="ignore"):
        for ufunc in (np.add, np.multiply, np.divide, np.sqrt, np.exp, np.log2, np.hypot, np.remainder, np.maximum):
            for left, right in zip(edges.tolist(), np.roll(edges, 1).tolist(), strict=True):
                row = [np.array([value], form.carrier) for value in (left, right)][: ufunc.nin]
                single = arithmetic().apply(ufunc, [operand[0] for operand in row])
                assert isinstance(single, np.generic)
                assert single.dtype == form.carrier
                if ufunc in (np.exp, np.log2, np.hypot) and form.native:
                    continue  # NumPy's own functions, which may compute scalars otherwise than arrays
                many = arithmetic().apply(ufunc, row)
                assert oracle.differ(many, np.array([single], np.float64)).size == 0, (ufunc, left, right)


@every_format
def test_a_sum_that_is_exactly_zero_is_negative_only_when_rounding_down(name: str) -> None:
    """IEEE 754-2019, section 6.3, recalled from memory: x - x is +0, but -0 toward -infinity; -0 - 0 stays -0."""
    for rounding in oracle.MODES:
        arithmetic = Arithmetic(format=FORMATS[name], rounding=rounding)  # type: ignore[arg-type]
        x = arithmetic.cast(np.array([1.5, 0.0, -0.0, 0.0, -0.0]))
        y = arithmetic.cast(np.array([-1.5, -0.0, 0.0, 0.0, -0.0]))
        differ = rounding == "down"
        want = [differ, differ, differ, False, True]
        assert np.signbit(arithmetic.apply(np.add, (x, y))).tolist() == want
        assert np.signbit(arithmetic.apply(np.subtract, (x, -y))).tolist() == want
        one = x.dtype.type(1.0)
        assert np.signbit(arithmetic.fma(x, one, y)).tolist() == want


@pytest.mark.parametrize("rounding", DIRECTED)
@every_format
def test_too_large_a_number_is_the_largest_finite_or_infinite(name: str, rounding: Any) -> None:
    """Toward zero and away from infinity the largest finite value stands; a quotient by zero is infinite (or NaN)."""
    form = FORMATS[name]
    arithmetic = Arithmetic(format=form, rounding=rounding)
    top = form.carrier.type(form.max_finite)
    with np.errstate(all="ignore"):
        above, below = (float(arithmetic.apply(np.multiply, (sign * top, top))) for sign in (1, -1))
        pole = float(arithmetic.apply(np.divide, (top, form.carrier.type(0.0))))
    infinite = isnan if name == "e4m3" else (lambda value: value in (inf, -inf))
    assert (above == form.max_finite) if rounding in ("zero", "down") else infinite(above)
    assert (below == -form.max_finite) if rounding in ("zero", "up") else infinite(below)
    assert infinite(pole)


@pytest.mark.parametrize("rounding", [*DIRECTED, "stochastic"])
@every_format
def test_a_target_receives_the_result_of_every_way(name: str, rounding: Any) -> None:
    """`out` may be a strided view, or the first operand itself as for an in-place operator."""
    form = FORMATS[name]
    mode: dict[str, Any] = {"format": form, "rounding": rounding}
    values = narrow(np.random.default_rng(63).uniform(0.3, 3.0, (2, 12)), form)
    for ufunc in (np.add, np.divide, np.exp, np.power, np.negative):

        def arithmetic() -> Arithmetic:
            return Arithmetic(**mode, stream=Stochastic(1, 2, 3) if rounding == "stochastic" else None)

        operands = [row.copy() for row in values][: ufunc.nin]
        want = arithmetic().apply(ufunc, operands)
        base = np.full((12, 2), 7.0, form.carrier)
        target = base[:, 1]
        assert arithmetic().apply(ufunc, operands, out=target) is target
        if form.precision < 53 or ufunc not in (np.exp, np.power):
            assert np.array_equal(target, want)
            assert arithmetic().apply(ufunc, operands, out=operands[0]) is operands[0]
            assert np.array_equal(operands[0], want)
        assert (base[:, 0] == 7.0).all()


@pytest.mark.parametrize("rounding", [*oracle.MODES, "stochastic"])
@every_format
def test_every_function_has_a_way_and_empty_results(name: str, rounding: Any) -> None:
    """No mode lacks a function of the table; no path, no value, no error."""
    stream = Stochastic(1, 2, 3) if rounding == "stochastic" else None
    arithmetic = Arithmetic(format=FORMATS[name], rounding=rounding, stream=stream)
    empty = np.empty((0, 3), arithmetic.format.carrier)
    for ufunc in WAYS:
        assert arithmetic.apply(ufunc, (empty,) * ufunc.nin).shape == (0, 3)
    assert arithmetic.fma(empty, empty, empty).shape == (0, 3)


def test_tf32_products_below_its_normal_numbers_are_not_rounded_twice() -> None:
    """2^-69 (1 + 2^-5) 2^-68 (1 - 31 2^-10) is half of the smallest number, 2^-137, and more by 2^-15 of itself.

    Computed from first principles. Negative control: rounded through float32 it is a tie and becomes zero.
    """
    arithmetic = Arithmetic(format=FORMATS["tf32"])
    x, y = np.float32(2.0**-69 * (1 + 2.0**-5)), np.float32(2.0**-68 * (1 - 31 * 2.0**-10))
    exact = Fraction(float(x)) * Fraction(float(y))
    assert exact == Fraction(2) ** -137 * (1 + Fraction(2) ** -15)
    assert arithmetic.apply(np.multiply, (x, y)) == 2.0**-136
    assert arithmetic.cast(np.array([x * y]))[0] == 0.0


def test_e4m3_has_no_infinity_and_overflows_to_nan() -> None:
    """448 is the largest, 464 a tie that stays, what lies beyond is NaN, and so are infinity and its constant.

    The conversion of OCP OFP8 1.0 that does not saturate; the same figures from ml_dtypes' type.
    """
    arithmetic = Arithmetic(format=FORMATS["e4m3"])
    values = np.array([448.0, 464.0, np.nextafter(464.0, inf), 480.0, 1e9, inf, -inf, -465.0])
    with np.errstate(all="ignore"):
        theirs = values.astype(FORMATS["e4m3"].storage).astype(np.float64)
    want = [448.0, 448.0, *[nan] * 6]
    assert np.array_equal(arithmetic.cast(values), want, equal_nan=True)
    assert np.array_equal(theirs, want, equal_nan=True)
    assert isnan(arithmetic.constant(inf))
    assert copysign(1.0, arithmetic.constant(-0.0)) == -1.0
    assert not arithmetic.holds(np.array([inf]))
