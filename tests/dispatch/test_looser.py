"""Lines computed as a compiler may: what is fused, what stays wide, and where a value is rounded after all."""

from __future__ import annotations

from functools import partial
from types import CodeType
from typing import Any

import numpy as np
import pytest

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.copies import copy_module, new_setting
from narrowgauge.dispatch.looser import LooserSetting, Manner
from narrowgauge.dispatch.setting import Place

FIRST, LAST = Manner("fused"), Manner("fused", last=frozenset({Place("looser_kernel.py", 11)}))
ACROSS, WIDE = Manner("fused", across=True), Manner("wider", wide="float32")
SOURCE = """
import numpy as np

def one_line(a, b, c):
    return a * b + c

def minus(a, b, c):
    return c - a * b

def two_products(a, b, c):
    return a * b + c * a

def stored(a, b, c):
    product = a * b
    return product + c

def in_place(a, b, c):
    total = c + 0.0
    total += a * b
    return total

def argument(a, b, c):
    return np.maximum(a * b, -100.0) + c

def long(a, b, c):
    return a * b + c - a

def loop(a, b, c):
    x = c
    for _ in range(3):
        x = x + a * b
    return x
"""


def run(name: str, manner: Manner, form: str = "float16") -> Any:
    """What a function of SOURCE gives on 1,000 normals, and the operands as float64."""
    code: CodeType = compile(SOURCE, "looser_kernel.py", "exec")
    setting = new_setting(arithmetic_named(form), None, None, partial(LooserSetting, manner=manner))
    module = copy_module(code, "looser_kernel", setting)
    setting.files.add("looser_kernel.py")
    draw = np.random.default_rng(1)
    carriers = [arithmetic_named(form).cast(draw.standard_normal(1000)) for _ in range(3)]
    found = getattr(module, name)(*(Array(one, setting) for one in carriers))
    return found._carrier, [one.astype(np.float64) for one in carriers]


def rounded(values: Any, form: str = "float16") -> Any:
    return arithmetic_named(form).cast(np.asarray(values, np.float64)).astype(np.float64)


@pytest.mark.parametrize(
    ("name", "manner", "expected"),
    [
        ("one_line", FIRST, lambda a, b, c: a * b + c),
        ("minus", FIRST, lambda a, b, c: c - a * b),
        ("two_products", FIRST, lambda a, b, c: a * b + rounded(c * a)),
        ("two_products", LAST, lambda a, b, c: rounded(a * b) + c * a),
        ("stored", FIRST, lambda a, b, c: rounded(a * b) + c),
        ("stored", ACROSS, lambda a, b, c: a * b + c),
        ("in_place", FIRST, lambda a, b, c: c + a * b),
        ("argument", FIRST, lambda a, b, c: rounded(a * b) + c),
        ("argument", WIDE, lambda a, b, c: rounded(a * b) + c),
        ("one_line", WIDE, lambda a, b, c: a * b + c),
        ("stored", WIDE, lambda a, b, c: rounded(a * b) + c),
    ],
)
def test_one_rounding_of_the_exact_value(name: str, manner: Manner, expected: Any) -> None:
    """Products of float16 are exact in float32, and these sums of them in float64: no rounding beside the last."""
    found, operands = run(name, manner)
    exact = expected(*operands)
    if manner.kind == "wider":
        exact = np.asarray(exact, np.float32) if name != "one_line" else np.float32(exact)
    assert np.array_equal(found.astype(np.float64), rounded(exact))


def test_a_line_that_is_run_again_starts_from_what_was_stored() -> None:
    """The sum of the last turn is rounded, though the same line made it."""
    found, (a, b, c) = run("loop", WIDE)
    x = c
    for _ in range(3):
        x = rounded(np.float32(x) + np.float32(a) * np.float32(b))
    assert np.array_equal(found.astype(np.float64), x)


def test_intermediates_stay_wide_to_the_end_of_a_line() -> None:
    """Two sums in one line are rounded once; rounding each gives other numbers on many paths."""
    found, (a, b, c) = run("long", WIDE)
    wide = np.float32(a) * np.float32(b) + np.float32(c) - np.float32(a)
    assert np.array_equal(found.astype(np.float64), rounded(wide))
    each = rounded(rounded(rounded(a * b) + c) - a)
    assert np.count_nonzero(each != found) > 100


def test_float32_products_are_fused_exactly() -> None:
    """As a fused multiply-add rounds: held against fractions of whole numbers on the first paths."""
    from fractions import Fraction

    found, operands = run("one_line", FIRST, "float32")
    for value, a, b, c in zip(found[:200], *operands, strict=False):
        exact = Fraction(a) * Fraction(b) + Fraction(c)
        near = [value, np.nextafter(value, np.float32(np.inf)), np.nextafter(value, np.float32(-np.inf))]
        assert min(near, key=lambda one: abs(Fraction(float(one)) - exact)) == value
