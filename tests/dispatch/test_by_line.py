"""Lines with formats of their own: what is rounded belongs to its line, and all lines together are the format's run."""

from __future__ import annotations

import textwrap

import numpy as np
import pytest
from kernel_runs import FILE, call

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.indouble import InDouble
from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.byline import CONSTANTS, DRAWS, STEP, ByLine, Widths
from narrowgauge.dispatch.copies import copy_module, new_setting
from narrowgauge.dispatch.setting import Place

HALF = FORMATS["float16"]
DRAWN = np.random.default_rng(3).standard_normal((8, 200))

# Line 4 begins the function; what a body says stands from line 5 on.
BODIES = {
    "steps": "S = np.ones(200)\nfor dw in x:\n    S = S + 0.1 * S * dw\nreturn S",
    "in place": "S = np.ones(200)\nfor dw in x:\n    S *= 1.0 + 0.1 * dw\n    S -= 0.001\nreturn S",
    "functions": "return np.exp(-x[0]) + np.sqrt(np.abs(x[1])) * np.log1p(np.abs(x[2])) / (2.0 + np.cos(x[3]))",
    "two operands": "return np.hypot(x[0], x[1]) + np.arctan2(x[2], x[3]) + np.abs(x[4]) ** 0.7 + x[5] ** 2",
    "choices": "return np.where(x[0] > 0.3, np.maximum(x[1], 0.25), x[2]) - np.clip(x[3], -0.7, 0.7)",
    "sums": "return x.sum(axis=0) + np.mean(x[2:5], axis=0) + np.cumsum(x, axis=0)[3]",
    "few values": "return np.array([x[:, 0].sum(), np.prod(x[:3, 1])])",
    "scalars": "a = x[0, 0] / x[1, 0]\nreturn math.exp(a) + 0.1 * a + (x[2, 0] > 0) * 1.3",
    "constants": "return x[0] * np.array([0.1, 0.2] * 100) + 3 * x[1]",
}
LINEAR = ("steps", "in place", "choices")  # where a float32 run is nothing but elementary operations


def by_line(body, widths, lasting=None, drawn=None):
    """The carrier that a kernel returns, as float64, where each line has a format of its own."""
    source = "import math\nimport numpy as np\n\ndef kernel(x):\n" + textwrap.indent(textwrap.dedent(body), "    ")
    arithmetic = ByLine(widths, lasting)
    setting = new_setting(arithmetic)
    module = copy_module(compile(source, FILE, "exec", dont_inherit=True), "kernel", setting)
    with np.errstate(all="ignore"):
        result = module.kernel(Array(widths.drawn().cast(DRAWN if drawn is None else drawn), setting))
    assert setting.faults == []
    assert np.asarray(result._carrier).dtype == np.float64
    return np.asarray(result._carrier)


def whole(body, form, drawn=None):
    """The same in an arithmetic of its own."""
    source = "import math\nimport numpy as np\n\ndef kernel(x):\n" + textwrap.indent(textwrap.dedent(body), "    ")
    return np.asarray(call(source, form, DRAWN if drawn is None else drawn)[0]._carrier).astype(np.float64)


def line(number):
    return Place(FILE, number)


@pytest.mark.parametrize("form", ["float16", "bfloat16", "e5m2", "tf32"])
@pytest.mark.parametrize("name", BODIES)
def test_all_lines_together_are_the_run_of_the_format(name, form):
    """Where every line and every input is rounded the bits are those of the format's own arithmetic."""
    assert np.array_equal(by_line(BODIES[name], Widths(rest=FORMATS[form])), whole(BODIES[name], form), equal_nan=True)


@pytest.mark.parametrize("name", LINEAR)
def test_float32_by_line_is_float32(name):
    """float32 in float64 carriers gives float32's bits for elementary operations."""
    assert np.array_equal(by_line(BODIES[name], Widths(rest=FORMATS["float32"])), whole(BODIES[name], "float32"))


@pytest.mark.parametrize("name", BODIES)
def test_no_line_rounded_is_float64(name):
    """Where nothing is rounded the bits are those of float64, whose sums are NumPy's own."""
    assert np.array_equal(by_line(BODIES[name], Widths(rest=None)), whole(BODIES[name], "float64"))


def test_a_rounding_belongs_to_the_line_that_computes():
    """The named line's result is rounded once; what other lines compute of it is not."""
    body = "a = x[0] * x[1]\nb = a + x[2]\nreturn b / 3.0"
    product = DRAWN[0] * DRAWN[1]
    half = product.astype(np.float16).astype(np.float64)
    named = by_line(body, Widths(rest=None, named={line(5): HALF}))
    assert np.array_equal(named, (half + DRAWN[2]) / 3.0)
    assert not np.array_equal(named, (product + DRAWN[2]) / 3.0)
    sums = (product + DRAWN[2]).astype(np.float16).astype(np.float64)
    assert np.array_equal(by_line(body, Widths(rest=None, named={line(6): HALF})), sums / 3.0)


def test_all_but_one_line():
    """A line that is named with None is left in float64 where all others are rounded."""
    body = "a = x[0] * x[1]\nreturn a + x[2]"
    found = by_line(body, Widths(rest=HALF, named={line(5): None, DRAWS: None}))
    assert np.array_equal(found, (DRAWN[0] * DRAWN[1] + DRAWN[2]).astype(np.float16))


def test_inputs_are_rounded_by_themselves():
    """Draws, the step size and the other constants have formats of their own; a step size is what does not last."""
    body = "return 0.1 * x[0] + 0.3"
    drawn = DRAWN[0].astype(np.float16).astype(np.float64)
    tenth, third = (float(np.float16(number)) for number in (0.1, 0.3))
    lasting = {(line(5), 0.3)}
    for item, expected in (
        (DRAWS, 0.1 * drawn + 0.3),
        (STEP, tenth * DRAWN[0] + 0.3),
        (CONSTANTS, 0.1 * DRAWN[0] + third),
    ):
        assert np.array_equal(by_line(body, Widths(rest=None, named={item: HALF}), lasting), expected), item
    both = by_line(body, Widths(rest=None, named={CONSTANTS: HALF}))
    assert np.array_equal(both, tenth * DRAWN[0] + third)


def test_arrays_of_constants_are_constants():
    """A plain array that meets the state is rounded with the constants, whatever its line."""
    body = "return np.full(200, 0.1) + np.linspace(0.0, 1.0, 200) * x[0]"
    found = by_line(body, Widths(rest=None, named={CONSTANTS: HALF}))
    grid = np.linspace(0.0, 1.0, 200).astype(np.float16).astype(np.float64)
    assert np.array_equal(found, float(np.float16(0.1)) + grid * DRAWN[0])


def test_a_narrow_line_converts_what_it_takes():
    """With conversion a line's operands and constants are in its own format, as code must have them."""
    body = "a = 0.1 * x[0]\nreturn a * x[1]"
    widths = Widths(rest=HALF, named={line(5): FORMATS["float32"], DRAWS: FORMATS["float32"]}, converts=True)
    single, half = DRAWN.astype(np.float32), DRAWN.astype(np.float16)
    a = np.float32(0.1) * single[0]
    assert np.array_equal(by_line(body, widths), a.astype(np.float16) * half[1])
    kept = by_line(body, Widths(rest=HALF, named=widths.named))
    unconverted = (0.1 * single[0].astype(np.float64)).astype(np.float32).astype(np.float64) * single[1]
    assert not np.array_equal(kept, by_line(body, widths))
    assert np.abs(kept - unconverted).max() < 0.002


def test_partial_sums_of_a_narrow_line_are_rounded():
    """A sum of a few values, too, is rounded at each step, not only at its end."""
    ones = np.full((3000, 2), 1.0)
    assert by_line("return x.sum(axis=0)", Widths(rest=HALF), drawn=ones)[0] == 2048.0
    assert by_line("return x.sum(axis=0)", Widths(rest=None, named={DRAWS: HALF}), drawn=ones)[0] == 3000.0


@pytest.mark.parametrize("form", [name for name in FORMATS if name not in ("float64", "tf32")])
def test_a_format_in_double_computes_as_itself(form):
    """Sums, products, quotients and roots of values of the format have the same bits in a float64 carrier."""
    own, double = arithmetic_named(form), InDouble(FORMATS[form])
    draws = np.random.default_rng(11)
    values = own.cast(draws.standard_normal(4096) * np.exp2(draws.integers(-8, 8, 4096)))
    x, y = values[:2048], values[2048:]
    with np.errstate(all="ignore"):
        for ufunc, operands in (
            (np.add, (x, y)), (np.subtract, (x, y)), (np.multiply, (x, y)), (np.divide, (x, y)), (np.sqrt, (abs(x),)),
        ):  # fmt: skip
            expected = own.apply(ufunc, operands).astype(np.float64)
            found = double.apply(ufunc, [operand.astype(np.float64) for operand in operands])
            assert np.array_equal(found, expected, equal_nan=True), ufunc
            assert found.dtype == np.float64
