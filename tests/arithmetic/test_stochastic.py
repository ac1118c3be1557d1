"""Stochastic rounding: one of the two neighbours by the exact distance, unbiased, and keyed by integers alone."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from fractions import Fraction
from math import inf, isfinite, sqrt
from typing import Any

import mpfr_oracle as oracle
import numpy as np
import pytest

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.rounding import narrow
from narrowgauge.arithmetic.stochastic import Stochastic

FALSE_ALARM = 1e-6  # of each statistical test, two-sided: 4.8917 standard deviations of the normal distribution
DEVIATIONS = 4.8917

EXACT: dict[str, Callable[[Fraction, Fraction], Fraction]] = {
    "add": lambda x, y: x + y,
    "subtract": lambda x, y: x - y,
    "multiply": lambda x, y: x * y,
    "divide": lambda x, y: x / y,
}


def stochastic(name: str, *key: int, **more: Any) -> Arithmetic:
    """Return the stochastic arithmetic of a format with a new stream."""
    return Arithmetic(format=FORMATS[name], rounding="stochastic", stream=Stochastic(*(key or (1, 2, 3))), **more)


def neighbours(exact: Fraction, name: str) -> tuple[float, float, Fraction]:
    """Return the values on both sides of a positive number, as if exponents went on, and its place between them."""
    precision = oracle.SHAPES[name][0]
    exponent = exact.numerator.bit_length() - exact.denominator.bit_length()
    exponent -= exact < Fraction(2) ** exponent
    spacing = Fraction(2) ** (max(exponent, oracle.least_exponent(name)) - precision + 1)
    units, rest = divmod(exact, spacing)
    top = Fraction(FORMATS[name].max_finite)
    over = inf if FORMATS[name].infinite else float("nan")
    low, high = (float(value) if value <= top else over for value in (units * spacing, (units + 1) * spacing))
    return low, high, rest / spacing


@pytest.mark.parametrize("fast", [True, False], ids=["compiled", "numpy"])
@pytest.mark.parametrize("name", oracle.ALL)
def test_the_exact_distance_decides(name: str, fast: bool, monkeypatch: pytest.MonkeyPatch) -> None:
    """Each result is the larger neighbour where the random number is below the exact place between both.

    On 1,500 pairs of edge values and 1,500 random pairs, in rationals. The two figures may differ by 2^-50 of the
    spacing, what float64 leaves of a distance; the fixed seed has no number so close to a distance but zero.
    """
    if not fast:
        monkeypatch.setattr(compiled, "kernel", lambda name: None)
    generator = np.random.default_rng(41)
    edges = generator.choice(oracle.edge_values(name), (2, 1500))
    left, right = (np.append(*both) for both in zip(edges, oracle.random_pairs(name, 1500, 42), strict=True))
    compared = moved = 0
    for function, operation in EXACT.items():
        numbers = Stochastic(5, 6, 7).uniforms(left.shape).copy()
        found = oracle.computed(name, function, left, right, rounding="stochastic", stream=Stochastic(5, 6, 7))
        for x, y, u, got in zip(left.tolist(), right.tolist(), numbers.tolist(), found.tolist(), strict=True):
            if not (isfinite(x) and isfinite(y)) or (function == "divide" and y == 0):
                continue
            exact = operation(Fraction(x), Fraction(y))
            if exact == 0:
                assert got == 0
                continue
            low, high, place = neighbours(abs(exact), name)
            want = high if Fraction(u) < place else low
            assert got == (want if exact > 0 else -want) or (got != got and want != want), (function, x, y)  # noqa: PLR0124
            compared += 1
            moved += place > 0
    assert compared > 4000
    assert moved > (1000 if FORMATS[name].bits > 8 else 500)


@pytest.mark.parametrize("name", oracle.ALL)
def test_what_the_format_has_is_not_moved(name: str) -> None:
    """A value of the format is an exact result, whatever the random number: idempotent."""
    values = oracle.edge_values(name)
    found = oracle.computed(
        name, "multiply", values, np.ones_like(values), rounding="stochastic", stream=Stochastic(1, 1, 1)
    )
    assert oracle.differ(found, values).size == 0
    assert oracle.differ(narrow(values, FORMATS[name], "stochastic", uniforms=np.zeros_like(values)), values).size == 0


@pytest.mark.parametrize("name", ["float16", "bfloat16", "e4m3", "e5m2", "tf32"])
def test_functions_go_to_a_neighbour(name: str) -> None:
    """exp and sin of any input lie at MPFR's rounding down or at its rounding up, and at both somewhere."""
    values = oracle.all_values(name) if FORMATS[name].bits <= 16 else oracle.random_pairs(name, 5000, 43)[0]
    numbers = oracle.to_mpfr(values, name)
    for function in ("exp", "sin", "log2"):
        found = oracle.computed(name, function, values, rounding="stochastic", stream=Stochastic(1, 1, 1))
        down, up = (oracle.unary(function, numbers, name, rounding) for rounding in ("down", "up"))
        with np.errstate(invalid="ignore"):
            at_low, at_high = oracle.differ(found, down), oracle.differ(found, up)
        assert np.intersect1d(at_low, at_high).size == 0
        assert at_low.size > 20
        assert at_high.size > 20


def test_a_sum_of_ones_has_its_mean_and_deviation() -> None:
    """10,000 ones in binary16: mean 10,000 and standard deviation 164.3, computed from first principles.

    4,096 sums: the mean has a standard error of 2.57, the deviation one of 1.82 (normal theory); bounds at a false
    alarm rate of 1e-6 each, fixed seed. Negative control: to nearest the sum sticks at 2048.
    """
    sums = 4096
    plain, random = Arithmetic(format=FORMATS["float16"]), stochastic("float16", 1, 0, 0)
    stuck = total = np.zeros(sums, np.float32)
    for _ in range(10_000):
        total = random.apply(np.add, (total, 1.0))
        stuck = plain.apply(np.add, (stuck, 1.0))
    assert set(stuck.tolist()) == {2048.0}
    wide = total.astype(np.float64)
    assert abs(wide.mean() - 10_000) < DEVIATIONS * 164.3 / sqrt(sums)
    assert abs(wide.std(ddof=1) - 164.3) < DEVIATIONS * 164.3 / sqrt(2 * sums) + 0.05  # the figure's own last digit


@pytest.mark.parametrize("name", ["float16", "bfloat16", "tf32", "float32", "float64", "e4m3", "e5m2"])
def test_rounding_is_unbiased(name: str) -> None:
    """x y for 200,000 random pairs: the mean error in units of the spacing is 0 to 4.9 standard errors.

    False alarm 1e-6 each. Negative control: rounding toward zero is told from it.
    """
    generator = np.random.default_rng(44)
    precision = FORMATS[name].precision
    x, y = 1 + generator.integers(0, 1 << (precision - 1), (2, 200_000)) * 2.0 ** (1 - precision)

    def error(found: Any) -> Any:
        """Return (found - x y) in spacings of binade [1, 4): exact by Dekker's or in integers below 53 bits."""
        scale = 2 ** (precision - 1)
        units = (
            np.array([int(v * scale) for v in (x, y, found.astype(np.float64))[k].tolist()], object) for k in range(3)
        )
        a, b, c = units
        rest = c * scale - a * b
        return np.array([float(r) / scale for r in rest]) / np.where(x * y >= 2, 2.0, 1.0)  # of the exact product

    with_numbers = error(oracle.computed(name, "multiply", x, y, rounding="stochastic", stream=Stochastic(9, 9, 9)))
    assert abs(with_numbers.mean()) < DEVIATIONS * with_numbers.std() / sqrt(x.size)
    assert error(oracle.computed(name, "multiply", x, y, rounding="zero")).mean() < -0.15


def test_the_key_decides_and_nothing_else() -> None:
    """The same four integers give the same numbers, in any shape and order of operations; others give others."""
    first = Stochastic(1, 2, 3)
    numbers = [first.uniforms((6,)).copy(), first.uniforms((6,)).copy()]
    again = Stochastic(1, 2, 3)
    assert np.array_equal(again.uniforms((2, 3)).reshape(-1), numbers[0])
    assert np.array_equal(again.uniforms((6,)), numbers[1])
    seen = {tuple(numbers[0].tolist()), tuple(numbers[1].tolist())}
    for key in ((2, 2, 3), (1, 3, 3), (1, 2, 4), (1, 3, 2), (3, 2, 1)):
        seen.add(tuple(Stochastic(*key).uniforms((6,)).tolist()))
    assert len(seen) == 7


def test_another_process_draws_the_same() -> None:
    """A new interpreter, with compiled loops switched off, gets the same numbers."""
    code = (
        "from narrowgauge.arithmetic.stochastic import Stochastic\n"
        "stream = Stochastic(1, 2, 3); stream.uniforms((5,)); print(stream.uniforms((4,)).tobytes().hex())"
    )
    environment = {"NARROWGAUGE_COMPILED": "0", "PYTHONPATH": ":".join(filter(None, sys.path))}
    run = subprocess.run([sys.executable, "-c", code], env=environment, capture_output=True, text=True, check=True)
    stream = Stochastic(1, 2, 3)
    stream.uniforms((5,))
    assert run.stdout.strip() == stream.uniforms((4,)).tobytes().hex()


def test_the_layout_of_memory_does_not_matter() -> None:
    """The same numbers in another order of axes in memory give the same results in the same places."""
    x, y = np.random.default_rng(45).standard_normal((2, 30, 40)).astype(np.float32)
    c, f = (stochastic("bfloat16").apply(np.add, (np.asarray(x, order=o), np.asarray(y, order=o))) for o in ("C", "F"))
    assert np.array_equal(c, f)


def test_the_numbers_are_uniform_and_independent() -> None:
    """Mean, variance, and correlation of neighbours and of successive operations, at a false alarm rate of 1e-6 each.

    1,000,000 numbers: standard errors 2.9e-4 (mean), 7.5e-5 (variance), 1e-3 (correlation). Negative control: a
    sequence that only counts fails the correlation.
    """
    stream = Stochastic(11, 0, 0)
    first, second = stream.uniforms((1_000_000,)).copy(), stream.uniforms((1_000_000,)).copy()
    assert abs(first.mean() - 0.5) < DEVIATIONS * 2.9e-4
    assert abs(first.var() - 1 / 12) < DEVIATIONS * 7.5e-5
    assert abs(np.corrcoef(first[1:], first[:-1])[0, 1]) < DEVIATIONS * 1e-3
    assert abs(np.corrcoef(first, second)[0, 1]) < DEVIATIONS * 1e-3
    counting = np.arange(1_000_000) / 1e6
    assert abs(np.corrcoef(counting[1:], counting[:-1])[0, 1]) > 0.99


def test_constants_and_casts_are_rounded_to_nearest() -> None:
    """Only operations are random: constants and draws are what they are to nearest, and use no number."""
    arithmetic, plain = stochastic("float16"), Arithmetic(format=FORMATS["float16"])
    values = np.random.default_rng(46).standard_normal(1000)
    assert np.array_equal(arithmetic.cast(values), plain.cast(values))
    assert arithmetic.constant(0.1) == plain.constant(0.1)
    assert arithmetic.constant(2**70 + 2**62 + 1) == plain.constant(2**70 + 2**62 + 1)
    assert arithmetic.stream is not None
    assert arithmetic.stream.operations == 0
    arithmetic.apply(np.maximum, (arithmetic.cast(values), 0.0))
    assert arithmetic.stream.operations == 0
    arithmetic.apply(np.exp, (arithmetic.cast(values),))
    assert arithmetic.stream.operations == 1
