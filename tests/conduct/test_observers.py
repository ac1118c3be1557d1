"""Which constants a format cannot take, and what an observer keeps of them."""

from __future__ import annotations

import math
from collections import Counter

import numpy as np
import pytest

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.conduct.observers import Constants, Finding, Notes, judged
from narrowgauge.dispatch.array import as_state
from narrowgauge.dispatch.copies import new_setting
from narrowgauge.dispatch.setting import Place

NARROW = ("float16", "bfloat16", "float32")
TINY = 2.0**-24  # the smallest subnormal of float16

# format, constant, what becomes of it: kind and value
CASES = [
    ("float16", 1e-8, "zero", 0.0),
    ("float16", -1e-8, "zero", 0.0),
    ("float16", TINY / 2, "zero", 0.0),  # a tie, to the even one
    ("float16", TINY, "subnormal", TINY),  # held exactly, and still subnormal
    ("float16", 3e-5, "subnormal", float(np.float16(3e-5))),
    ("float16", -3e-5, "subnormal", float(np.float16(-3e-5))),
    ("float16", 2.0**-14 - 2.0**-25, "moved", 2.0**-14),  # a tie, to the smallest normal, by 1 ulp
    ("float16", 6e23, "infinite", math.inf),
    ("float16", -6e23, "infinite", -math.inf),
    ("float16", 65520.0, "infinite", math.inf),
    ("bfloat16", 1e-45, "zero", 0.0),
    ("bfloat16", 1e-39, "subnormal", 11 * 2.0**-133),  # 1e-39 is 10.9 times the smallest subnormal, 2^-133
    ("float32", 1e-46, "zero", 0.0),
    ("float32", 1e-40, "subnormal", float(np.float32(1e-40))),
    ("float32", 1e39, "infinite", math.inf),
]
HARMLESS = {
    "float16": (0.0, 0.1, 1 / 3, 2049.0, 65519.0, 6.2e-5, 2.0**-14, 2.0**-14 - 2.0**-26, math.inf, math.nan),
    "bfloat16": (1e-8, 1e-14, 6e23, 257.0, 0.1, 2.0**-126, 3.39e38),
    "float32": (1e-14, 6e23, 0.1, 16777217.0, 2.0**-126, 1e-30),
}


@pytest.mark.parametrize(("name", "constant", "kind", "became"), CASES)
def test_a_constant_that_a_format_cannot_take(name: str, constant: float, kind: str, became: float) -> None:
    """It becomes 0, infinite, subnormal, or moves to the smallest normal number."""
    finding = judged(constant, arithmetic_named(name))
    assert finding is not None
    assert finding[:2] == (kind, became)


@pytest.mark.parametrize("name", NARROW)
def test_a_constant_that_rounds_benignly_is_none(name: str) -> None:
    """Negative control: what becomes a normal number is no finding, however many digits it loses; nor are 0 and NaN."""
    assert [judged(constant, arithmetic_named(name)) for constant in HARMLESS[name]] == [None] * len(HARMLESS[name])


def test_ulps_are_those_of_the_constant() -> None:
    """1e-8 is 1.34 x 2^-27, whose ulp in 11 bits is 2^-37; losing all of it is a move of 1e-8 / 2^-37 ulps."""
    assert judged(1e-8, arithmetic_named("float16")) == Finding("zero", 0.0, 1e-8 * 2.0**37)
    assert judged(1.5 * TINY, arithmetic_named("float16")) == Finding("subnormal", 2 * TINY, 0.5 * 2**10)
    assert judged(TINY, arithmetic_named("float16")) == Finding("subnormal", TINY, 0.0)


@pytest.mark.parametrize("name", NARROW)
def test_only_constants_beyond_the_exponents_are_findings(name: str) -> None:
    """Rounding to nearest moves a normal result at most half an ulp, so that the exponents alone decide.

    Over 20,000 numbers whose logarithm is uniform over more than the format's range, in a fixed order.
    """
    arithmetic = arithmetic_named(name)
    form = arithmetic.format
    rng = np.random.default_rng(3)
    low, high = math.log2(form.min_subnormal) - 4, math.log2(form.max_finite) + 4
    numbers = np.exp2(rng.uniform(low, high, 20_000))
    half = 2.0 ** (form.emin - form.precision - 1)  # of an ulp just below the smallest normal number
    normal = (numbers >= form.min_normal - half) & (numbers < form.max_finite + 2.0 ** (form.emax - form.precision))
    found = [judged(float(number), arithmetic) is not None for number in numbers]
    assert 100 < normal.sum() < 19_900
    assert found == (~normal).tolist()


def test_notes_keep_what_some_arm_cannot_take() -> None:
    """Numbers of every type and elements of arrays, each with its count; what all arms take is not kept."""
    setting = new_setting(arithmetic_named("float64"))
    constants = Constants(NARROW)
    for constant in (1e-8, 1e-8, 0.1, 3, True, np.float32(1e-8), np.int64(70000), 10**400, math.nan, math.inf):
        constants.note(setting, constant)
    constants.note(setting, np.array([[1e-8, 0.0], [1e-8, 1e39], [math.inf, math.nan]]))
    constants.note(setting, np.array([70000, 1]))
    constants.note(setting, np.array([True]))
    assert constants.found == {
        ("float16", None, "zero"): Counter({1e-8: 4, float(np.float32(1e-8)): 1}),
        ("float16", None, "infinite"): Counter({70000.0: 2, 1e39: 1}),
        ("bfloat16", None, "infinite"): Counter({1e39: 1}),
        ("float32", None, "infinite"): Counter({1e39: 1}),
    }


def test_runs_are_added_and_other_arms_fill_in() -> None:
    """Counts of one arm's runs add up; of another run only values count that are new."""
    setting = new_setting(arithmetic_named("float64"))
    first, second, other = Constants(["float16"]), Constants(["float16"]), Constants(["float16"])
    for constants, numbers in ((first, (1e-8, 1e-9)), (second, (1e-8,)), (other, (1e-8, 1e-10, 1e-10))):
        for number in numbers:
            constants.note(setting, number)
    first.add(second)
    first.fill_in(other)
    assert first.found == {("float16", None, "zero"): Counter({1e-8: 2, 1e-9: 1, 1e-10: 2})}


def test_an_array_parameter_is_noted_when_it_becomes_the_states() -> None:
    """`as_state` of a parameter reaches the observer, outside any line; a second table adds to it."""
    notes = Notes(NARROW)
    setting = new_setting(arithmetic_named("float32"), notes)
    as_state(np.array([1e-8, 2.0]), setting)
    as_state(np.array([1e-8]), setting)
    assert notes.constants.found == {("float16", None, "zero"): Counter({1e-8: 2})}


def test_a_setting_without_an_observer_notes_nothing() -> None:
    """Nobody looks: the same values come out, and there is nobody to tell."""
    watched, alone = (new_setting(arithmetic_named("float16"), one) for one in (Notes(NARROW), None))
    assert np.array_equal(watched.admit(np.array([1e-8, 0.1])), alone.admit(np.array([1e-8, 0.1])))
    assert alone.observer is None


def test_places_resolve_to_one_file() -> None:
    """A line of a file is the same whatever the path that leads to it."""
    assert Place("/a/b/../c.py", 3).resolved() == Place("/a/c.py", 3)
