"""Arms by name, and which of them can correct which."""

import itertools

import pytest

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.kernel.arms import Arm, wider

NAMES = [name for form in FORMATS for name in (form, f"{form}/approximate")]


@pytest.mark.parametrize("name", NAMES)
def test_a_name_says_format_and_draws(name):
    """And nothing else: the arm of a name has that name again."""
    arm = Arm.named(name)
    assert arm.name == name
    assert arm.form is FORMATS[name.split("/")[0]]
    assert arm.exact == ("/" not in name)


@pytest.mark.parametrize(
    ("one", "other", "can"),
    [
        ("float64", "float32", True),
        ("float32", "float32", False),
        ("float32", "tf32", True),
        ("float16", "tf32", False),  # of one precision
        ("float32", "float32/approximate", True),
        ("float16", "tf32/approximate", True),
        ("bfloat16", "float16/approximate", False),
        ("float64", "float64/approximate", True),
        ("float64/approximate", "float32", False),
        ("float64/approximate", "float32/approximate", False),
    ],
)
def test_who_can_correct_whom(one, other, can):
    """Exact draws and more precision; equal precision where only the draws are approximate."""
    assert wider(one, other) == can


def test_correcting_is_an_order():
    """No arm corrects itself, no two each other, and what corrects a corrector corrects what that corrects."""
    for a, b, c in itertools.product(NAMES, repeat=3):
        assert not (wider(a, b) and wider(b, a))
        assert not (wider(a, b) and wider(b, c)) or wider(a, c)
