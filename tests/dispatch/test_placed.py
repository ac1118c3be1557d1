"""What-ifs that single operations decide: products that feed sums unrounded, errors that are carried along."""

from __future__ import annotations

import textwrap

import numpy as np
import pytest
from kernel_runs import FILE

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.copies import copy_module, new_setting
from narrowgauge.dispatch.placed import Carried, Fused, Operation
from narrowgauge.dispatch.setting import Place

HALF = FORMATS["float16"]
DRAWN = np.random.default_rng(5).standard_normal((3, 2000)).astype(np.float16).astype(np.float64)


class Sums:
    """An observer that keeps where sums are computed."""

    def __init__(self):
        self.found = set()

    def saw(self, setting, operation, route, operands, result):
        frame = setting.frame()
        if operation in ("add", "subtract"):
            self.found.add(Operation(Place(frame.f_code.co_filename, frame.f_lineno), frame.f_lasti))

    def met(self, setting, constant):
        pass


def run(body, arithmetic, drawn=DRAWN, observer=None):
    """What a kernel returns in an arithmetic, float64."""
    source = "import numpy as np\n\ndef kernel(x):\n" + textwrap.indent(textwrap.dedent(body), "    ")
    setting = new_setting(arithmetic, observer)
    module = copy_module(compile(source, FILE, "exec", dont_inherit=True), "kernel", setting)
    result = module.kernel(Array(arithmetic.cast(np.asarray(drawn, np.float64)), setting))
    assert setting.faults == []
    return np.asarray(result._carrier, np.float64)


def half(values):
    return np.asarray(values, np.float64).astype(np.float16).astype(np.float64)


@pytest.mark.parametrize(
    ("body", "expected"),
    [
        ("return x[0] * x[1] + x[2]", lambda x, y, z: x * y + z),
        ("return x[2] + x[0] * x[1]", lambda x, y, z: z + x * y),
        ("return x[0] * x[1] - x[2]", lambda x, y, z: x * y - z),
        ("return x[2] - x[0] * x[1]", lambda x, y, z: z - x * y),
        ("return x[0] * 0.1 + x[2]", lambda x, y, z: x * half(0.1) + z),
        ("return x[0] * x[1] + x[1] * x[2]", lambda x, y, z: x * y + half(y * z)),
        ("s = x[2] * 1.0\ns += x[0] * x[1]\nreturn s", lambda x, y, z: z + x * y),
    ],
)
def test_a_product_feeds_a_sum_unrounded(body, expected):
    """The product of two float16 values and the sum are exact in float64, and rounded once."""
    assert np.array_equal(run(body, Fused(HALF)), half(expected(*DRAWN)))


def test_a_product_of_another_line_is_rounded_first():
    """Nothing is fused across lines, and without fusing the results differ: the test above can fail."""
    body = "p = x[0] * x[1]\nreturn p + x[2]"
    x, y, z = DRAWN
    separate = half(half(x * y) + z)
    assert np.array_equal(run(body, Fused(HALF)), separate)
    assert not np.array_equal(separate, half(x * y + z))


LOOP = "s = x[0] * 0.0\nfor dx in x:\n    s = s + (dx + 0.0)\nreturn s"


def sums_at(body, line, drawn=DRAWN):
    """The last sum of a line: the one whose result is the state."""
    seen = Sums()
    run(body, Fused(HALF), drawn, observer=seen)
    return frozenset({max(one for one in seen.found if one.place.line == line)})


@pytest.mark.parametrize("added", ["s = s + (dx", "s += (dx", "s = s - (-dx"])
def test_a_carried_error_joins_the_next_increment(added):
    """Two thousand and one ones in float16: 2049 is no value of it, but what is lost is carried and not lost."""
    body = LOOP.replace("s = s + (dx", added)
    sums = sums_at(body, 6)
    ones = np.ones((4096, 2))
    assert np.array_equal(run(body, Carried(HALF, frozenset()), ones), [2048.0, 2048.0])
    assert np.array_equal(run(body, Carried(HALF, sums), ones), [4096.0, 4096.0])


def test_carried_errors_keep_the_error_at_the_last_rounding():
    """A sum of many small numbers is as good as its last rounding and those of the increments."""
    small = half(np.random.default_rng(9).uniform(0.0, 0.01, (1000, 64)))
    exact = small.sum(axis=0)
    naive = np.abs(run(LOOP, Carried(HALF, frozenset()), small) - exact).max()
    carried = np.abs(run(LOOP, Carried(HALF, sums_at(LOOP, 6)), small) - exact).max()
    assert carried <= 2.0**-8  # half of the spacing of float16 between 4 and 8 is 2^-9
    assert naive > 4 * carried


@pytest.mark.parametrize("kept", ["np.minimum(sum, 1e4)", "np.clip(sum, 0.0, 1e4)", "sum.copy()", "np.array([*sum])"])
@pytest.mark.parametrize("added", ["(s + (dx + 0.0))", "((dx + 0.0) + s)"])
def test_an_error_is_carried_by_a_state_that_was_clipped_or_copied(kept, added):
    """It is another array by then, with the same values."""
    body = LOOP.replace("s + (dx + 0.0)", kept.replace("sum", added))
    ones = np.ones((4096, 2))
    assert np.array_equal(run(body, Carried(HALF, frozenset()), ones), [2048.0, 2048.0])
    assert np.array_equal(run(body, Carried(HALF, sums_at(body, 6)), ones), [4096.0, 4096.0])


def test_no_error_is_carried_by_a_path_that_begins_anew():
    """2051 is 2052 in float16, an error of -1: the first path is set to 0 there, and 2045 ones follow."""
    body = LOOP.replace("return s", "    s = np.where(s > np.array([2050.0] + [1e4] * 7), s * 0.0, s)\nreturn s")
    ones = np.ones((4096, 8))
    found = run(body, Carried(HALF, sums_at(body, 6, ones)), ones)
    assert np.array_equal(found, [2045.0] + [4096.0] * 7)


def test_no_error_is_carried_into_the_next_call():
    """A call that begins where the last one ended, at 2048 with an error of 1, knows nothing of that one."""
    body = LOOP.replace("x[0] * 0.0", "x[0] * 2048.0")
    ones, arithmetic = np.ones((1, 4)), Carried(HALF, sums_at(body, 6))
    assert [run(body, arithmetic, ones)[0] for _ in range(3)] == [2048.0] * 3
