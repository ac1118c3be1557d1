"""Every mode of every format against MPFR: operations, fused ones, functions; flushed subnormals; compiled and not."""

from __future__ import annotations

from typing import Any

import mpfr_oracle as oracle
import numpy as np
import pytest

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.arithmetic.formats import FORMATS

RANDOM_PAIRS = 20_000
DIRECTED = ("zero", "up", "down")
TABLES = [ufunc.__name__ for ufunc, way in WAYS.items() if way == "table"]
every_mode = pytest.mark.parametrize("rounding", list(oracle.MODES))
every_format = pytest.mark.parametrize("name", oracle.ALL)
both = pytest.mark.parametrize("fast", [True, False], ids=["compiled", "numpy"])


@pytest.fixture
def choose(monkeypatch: pytest.MonkeyPatch) -> Any:
    """Return a function that switches the compiled loops off, or skips where there are none."""

    def chosen(fast: bool) -> None:
        if not fast:
            monkeypatch.setattr(compiled, "kernel", lambda name: None)
        elif compiled.kernel("words") is None:
            pytest.skip("numba is not installed")

    return chosen


@pytest.fixture(scope="module")
def pairs() -> dict[str, Any]:
    """Return for each format edge pairs and random pairs, as float64 and as MPFR numbers."""
    found = {}
    for name in oracle.ALL:
        edges = oracle.all_pairs(oracle.edge_values(name)[:: 1 if name in oracle.EIGHT_BITS else 4])
        values = [np.append(*both) for both in zip(edges, oracle.random_pairs(name, RANDOM_PAIRS, 31), strict=True)]
        found[name] = values, [oracle.to_mpfr(operand, name) for operand in values]
    return found


@both
@every_mode
@every_format
def test_operations_equal_mpfr(name: str, rounding: str, fast: bool, pairs: Any, choose: Any) -> None:
    """+ - * / and the square root give MPFR's bits on pairs of edge values and 20,000 random pairs."""
    choose(fast)
    values, numbers = pairs[name]
    form = oracle.context(name, rounding)
    for function, (theirs, count) in oracle.BASIC.items():
        want = oracle.fitted(oracle.reckon(getattr(form, theirs), *numbers[:count]), name, rounding)
        found = oracle.computed(name, function, *values[:count], rounding=rounding)
        bad = oracle.differ(found, want)
        assert [(function, values[0][i], values[1][i], found[i], want[i]) for i in bad[:3]] == []


@both
@every_mode
@every_format
def test_flushed_subnormals_are_those_of_mpfr_flushed(
    name: str, rounding: str, fast: bool, pairs: Any, choose: Any
) -> None:
    """What MPFR rounds to a subnormal number is a zero of its sign, in sums, products and remainders."""
    choose(fast)
    values, numbers = pairs[name]
    keep = np.flatnonzero(~((np.abs(values) < FORMATS[name].min_normal) & (np.asarray(values) != 0)).any(axis=0))
    values, numbers = [operand[keep] for operand in values], [operand[keep] for operand in numbers]
    form = oracle.context(name, rounding)
    flushed = 0
    for function, theirs in (("subtract", "sub"), ("multiply", "mul"), ("fmod", "fmod")):
        kept = oracle.fitted(oracle.reckon(getattr(form, theirs), *numbers), name, rounding)
        want = oracle.fitted(kept, name, rounding, flushed=True)
        flushed += oracle.differ(kept, want).size
        found = oracle.computed(name, function, *values, rounding=rounding, subnormals="flushed")
        assert oracle.differ(found, want).size == 0
    assert flushed > 100  # negative control: kept ones would not pass


@both
@every_mode
@every_format
def test_fused_products_and_sums_equal_mpfr(name: str, rounding: str, fast: bool, choose: Any) -> None:
    """x y + z gives MPFR's bits on triples of edge values, of random values, and where the sum nearly cancels."""
    choose(fast)
    edges = oracle.edge_values(name)[:: 12 if name in oracle.EIGHT_BITS else 27]
    x, y, z = (grid.reshape(-1) for grid in np.meshgrid(edges, edges, edges))
    left, right = oracle.random_pairs(name, RANDOM_PAIRS // 2, 32)
    other = oracle.random_pairs(name, RANDOM_PAIRS // 2, 33)[0]
    nearest = oracle.context(name)
    product = oracle.reckon(nearest.mul, oracle.to_mpfr(left, name), oracle.to_mpfr(right, name))
    product = -oracle.fitted(product, name)
    triple = [np.concatenate(part) for part in ((x, left, left), (y, right, right), (z, other, product))]
    numbers = [oracle.to_mpfr(operand, name) for operand in triple]
    want = oracle.fitted(oracle.reckon(oracle.context(name, rounding).fma, *numbers), name, rounding)
    arithmetic = Arithmetic(format=FORMATS[name], rounding=rounding, fused=True)  # type: ignore[arg-type]
    with np.errstate(all="ignore"):
        found = arithmetic.fma(*(operand.astype(arithmetic.format.carrier) for operand in triple))
    bad = oracle.differ(found, want)
    assert [(*(operand[i] for operand in triple), found[i], want[i]) for i in bad[:3]] == []


@pytest.mark.parametrize(
    ("name", "operands", "right", "twice"),
    [
        ("float16", (3.0, 683.0, 2.0**-24), 2050.0, 2048.0),
        ("bfloat16", (7.0, 37.0, -(2.0**-60)), 258.0, 260.0),
        ("float32", (4097.0, 4099.0, -(2.0**-60)), 16793602.0, 16793604.0),
    ],
)
def test_fused_cases_that_two_roundings_get_wrong(
    name: str, operands: tuple[float, float, float], right: float, twice: float
) -> None:
    """Computed from first principles: through a wider format first each of these is wrong (negative control)."""
    arithmetic = Arithmetic(format=FORMATS[name], fused=True)
    x, y, z = map(arithmetic.format.carrier.type, operands)
    assert arithmetic.fma(x, y, z) == right
    assert arithmetic.cast(np.array([np.float64(x) * np.float64(y) + np.float64(z)]))[0] in (twice, right)
    wider = np.float32 if name == "float16" else np.float64
    assert arithmetic.cast(np.array([wider(x) * wider(y) + wider(z)], wider))[0] == twice


@pytest.mark.parametrize("rounding", DIRECTED)
@pytest.mark.parametrize("name", [*oracle.EIGHT_BITS, *oracle.SIXTEEN_BITS])
def test_functions_of_every_input_equal_mpfr(name: str, rounding: str) -> None:
    """All functions by table of all inputs: exact results stay, all others go to the side the mode says."""
    values = oracle.all_values(name)
    numbers = oracle.to_mpfr(values, name)
    for function in TABLES:
        want = oracle.unary(function, numbers, name, rounding)
        found = oracle.computed(name, function, values, rounding=rounding)
        bad = oracle.differ(found, want)
        assert [(function, values[i], found[i], want[i]) for i in bad[:3]] == []


@every_mode
@pytest.mark.parametrize("name", [*oracle.EIGHT_BITS, "tf32"])
def test_functions_of_the_other_formats_equal_mpfr(name: str, rounding: str) -> None:
    """All inputs of the 8-bit formats; edge values and 10,000 random ones of TF32, which has no tables."""
    eight = name in oracle.EIGHT_BITS
    more = oracle.random_pairs(name, 10_000, 34)[0]
    values = oracle.all_values(name) if eight else np.append(oracle.edge_values(name), more)
    numbers = oracle.to_mpfr(values, name)
    for function in [*TABLES, "square", "reciprocal"]:
        want = oracle.unary(function, numbers, name, rounding)
        found = oracle.computed(name, function, values, rounding=rounding)
        bad = oracle.differ(found, want)
        assert [(function, values[i], found[i], want[i]) for i in bad[:3]] == []


@every_mode
@pytest.mark.parametrize("name", [name for name in oracle.ALL if name not in ("float32", "float64")])
def test_functions_of_two_operands_equal_mpfr(name: str, rounding: str, pairs: Any) -> None:
    """power, arctan2, hypot and fmod on the same pairs, results beside 1 and beyond the range among them."""
    values, numbers = pairs[name]
    form = oracle.context(name, rounding)
    for function, theirs in {"power": "pow", "arctan2": "atan2", "hypot": "hypot", "fmod": "fmod"}.items():
        want = oracle.fitted(oracle.reckon(getattr(form, theirs), *numbers), name, rounding)
        found = oracle.computed(name, function, *values, rounding=rounding)
        bad = oracle.differ(found, want)
        assert [(function, values[0][i], values[1][i], found[i], want[i]) for i in bad[:3]] == []


@every_mode
@pytest.mark.parametrize("name", [name for name in oracle.ALL if name not in ("float32", "float64")])
@pytest.mark.parametrize("function", oracle.LOGARITHMS)
def test_logarithms_of_sums_equal_mpfr(function: str, name: str, rounding: str, pairs: Any) -> None:
    """Also where one term vanishes beside the other, and where both are equal: log2(2^x + 2^x) is x + 1."""
    values, numbers = pairs[name]
    exact, form = oracle.logarithm_of_sum(function), oracle.context(name, rounding)
    want = oracle.reckon(lambda x, y: form.plus(exact(x, y)), *numbers)
    found = oracle.computed(name, function, *values, rounding=rounding)
    bad = oracle.differ(found, oracle.fitted(want, name, rounding))
    assert [(values[0][i], values[1][i], found[i], want[i]) for i in bad[:3]] == []


@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_rounding_up_a_sum_of_float32_does_not_pass(name: str) -> None:
    """Negative control: an upward addition that starts from a float32 sum is told from the right one."""
    left, right = oracle.random_pairs(name, RANDOM_PAIRS, 35)
    form = oracle.context(name, "up")
    want = oracle.reckon(form.add, oracle.to_mpfr(left, name), oracle.to_mpfr(right, name))
    arithmetic = Arithmetic(format=FORMATS[name], rounding="up")
    with np.errstate(all="ignore"):
        found = arithmetic.cast(left.astype(np.float32) + right.astype(np.float32))
    assert oracle.differ(found, want).size > 100


@pytest.mark.parametrize("name", ["float32", "float64"])
def test_negative_control_of_the_native_formats(name: str) -> None:
    """The plain operation is told from the directed one in every operation."""
    left, right = oracle.random_pairs(name, RANDOM_PAIRS, 36)
    for function, (_, count) in oracle.BASIC.items():
        plain = oracle.computed(name, function, *(left, right)[:count])
        up = oracle.computed(name, function, *(left, right)[:count], rounding="up").astype(np.float64)
        assert oracle.differ(plain, up).size > 1000
