"""Formats whose exponents are shifted: all their values are a power of two times those of the format."""

from __future__ import annotations

import math

import numpy as np
import pytest

from narrowgauge.arithmetic.formats import FORMATS, format_named
from narrowgauge.arithmetic.indouble import InDouble
from narrowgauge.arithmetic.rounding import narrow

NARROW = [name for name in FORMATS if name != "float64"]


@pytest.mark.parametrize("shift", [-30, 7])
@pytest.mark.parametrize("name", NARROW)
def test_the_ends_of_the_range_move_and_the_precision_does_not(name, shift):
    """Largest and smallest values are 2^shift times as large."""
    form, moved = format_named(name), format_named(name).shifted(shift)
    for figure in ("max_finite", "min_normal", "min_subnormal"):
        assert getattr(moved, figure) == math.ldexp(getattr(form, figure), shift)
    assert moved.precision == form.precision
    assert moved.proper == form


@pytest.mark.parametrize("name", NARROW)
def test_rounding_follows_the_definition(name):
    """To the nearest multiple of the spacing at the value, ties to even, by integers; too large is infinite, or NaN."""
    form = format_named(name).shifted(5)
    values = np.random.default_rng(3).normal(size=2000) * 2.0 ** np.random.default_rng(4).integers(-150, 120, 2000)
    for value, found in zip(values, narrow(values, form), strict=True):
        spacing = 2.0 ** (max(math.frexp(value)[1] - 1, form.emin) - form.precision + 1)
        wanted = round(value / spacing) * spacing
        if abs(wanted) <= form.max_finite:
            assert found == wanted
        else:
            assert not math.isfinite(found)


def test_scaled_inputs_of_a_homogeneous_computation_give_scaled_results():
    """sqrt(x^2 + y^2) in float16 shifted by 2^6, on inputs times 2^6, is 2^6 times float16's, where it stays normal."""
    rng = np.random.default_rng(9)
    x, y = (narrow(rng.uniform(1.0, 8.0, 500), format_named("float16")).astype(np.float64) for _ in range(2))
    plain, moved = InDouble(format_named("float16")), InDouble(format_named("float16").shifted(6))
    added = [one.apply(np.add, (x * scale, y * scale)) / scale for one, scale in ((plain, 1.0), (moved, 64.0))]
    np.testing.assert_array_equal(*added)
    halved = [one.apply(np.divide, (x * scale, 3.0)) / scale for one, scale in ((plain, 1.0), (moved, 64.0))]
    np.testing.assert_array_equal(*halved)
    assert moved.apply(np.multiply, (np.array([2048.0]), np.array([1024.0])))[0] == 2.0**21, "past float16's 65504"


@pytest.mark.parametrize(("name", "shift"), [("float64", 1), ("float16", 513)])
def test_what_cannot_be_shifted_says_so(name, shift):
    """float64 has no wider carrier."""
    with pytest.raises(ValueError, match=rf"{name} cannot be shifted by {shift}; accepted: formats below float64"):
        format_named(name).shifted(shift)
