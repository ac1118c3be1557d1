"""The table of ways: what it calls exact never needs a rounding, what it calls a truth is one."""

from __future__ import annotations

from collections.abc import Callable
from itertools import chain
from math import ceil, floor, trunc
from typing import get_args

import mpfr_oracle as oracle
import numpy as np
import pytest

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic.elementary import WAYS, Way

EXACT = [ufunc.__name__ for ufunc, way in WAYS.items() if way == "exact"]
TRUTH = [ufunc.__name__ for ufunc, way in WAYS.items() if way == "truth"]


def operands(name: str, function: str) -> list[oracle.Doubles]:
    """Return all inputs for one operand, all pairs of edge values for two."""
    if getattr(np, function).nin == 2:
        return list(oracle.all_pairs(oracle.edge_values(name)))
    return [oracle.all_values(name)]


def test_every_way_is_a_known_word_and_in_use() -> None:
    """The five words of the table are those of its type, and each has functions."""
    assert set(WAYS.values()) == set(get_args(Way))


def test_operands_fit_the_way() -> None:
    """Tables take one operand, wide functions two, and every function has one result."""
    for ufunc, way in WAYS.items():
        assert ufunc.nout == 1
        if way in ("table", "wide"):
            assert ufunc.nin == (1 if way == "table" else 2)


def test_numpys_float_functions_are_all_listed() -> None:
    """What NumPy computes from floats to one float or boolean is listed, but for these, named here."""
    left_out = {
        "nextafter",  # neighbours in the carrier, not in the format
        "spacing",
        "ldexp",  # takes an integer
        "matmul",  # not elementwise
        "vecdot",
        "matvec",
        "vecmat",
        "conjugate",  # the identity for reals
    }
    floats = {
        name
        for name in dir(np)
        if isinstance(ufunc := getattr(np, name), np.ufunc)
        and ufunc.nout == 1
        and any(types in (f"{'d' * ufunc.nin}->d", f"{'d' * ufunc.nin}->?") for types in ufunc.types)
    }
    assert {getattr(np, name).__name__ for name in floats} - left_out == {ufunc.__name__ for ufunc in WAYS}


@pytest.mark.parametrize("function", EXACT)
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_exact_functions_return_values_of_the_format(name: str, function: str) -> None:
    """Computed in the carrier, the result is a value of the format already, on every input or edge pair."""
    found = oracle.computed(name, function, *operands(name, function))
    assert found.dtype == np.float32
    assert arithmetic_named(name).holds(found)


@pytest.mark.parametrize("function", TRUTH)
@pytest.mark.parametrize("name", oracle.NAMES)
def test_truths_are_booleans_and_the_same_in_float64(name: str, function: str) -> None:
    """A comparison of values is that of the exact numbers, whatever carries them."""
    edges = oracle.edge_values(name)
    values = list(oracle.all_pairs(np.append(edges[::4], edges[-1])))[: getattr(np, function).nin]
    found = oracle.computed(name, function, *values)
    assert found.dtype == bool
    python: dict[str, Callable[..., bool]] = {
        "less": float.__lt__,
        "less_equal": float.__le__,
        "equal": float.__eq__,
        "not_equal": float.__ne__,
        "greater": float.__gt__,
        "greater_equal": float.__ge__,
        "isfinite": lambda x: x - x == 0,
        "isinf": lambda x: abs(x) == float("inf"),
        "isnan": lambda x: x != x,  # noqa: PLR0124
        "signbit": lambda x: str(x).startswith("-"),
        "logical_and": lambda x, y: bool(x) and bool(y),
        "logical_or": lambda x, y: bool(x) or bool(y),
        "logical_xor": lambda x, y: bool(x) is not bool(y),
        "logical_not": lambda x: not x,
    }
    want = [python[function](*pair) for pair in zip(*(operand.tolist() for operand in values), strict=True)]
    keep = np.array([True] * found.size) if function != "signbit" else ~np.isnan(values[0])
    assert np.array_equal(found[keep], np.array(want)[keep])


@pytest.mark.parametrize(("function", "python"), [("floor", floor), ("ceil", ceil), ("trunc", trunc), ("rint", round)])
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_integral_parts_are_those_of_exact_numbers(name: str, function: str, python: Callable[[float], float]) -> None:
    """All finite inputs give Python's integer, with the sign of the input where that is zero."""
    values = oracle.all_values(name)
    values = values[np.isfinite(values)]
    want = np.array([float(python(value)) for value in values.tolist()])
    want = np.where(want == 0, np.copysign(0.0, values), want)
    assert oracle.differ(oracle.computed(name, function, values), want).size == 0


@pytest.mark.parametrize("name", oracle.NAMES)
def test_selections_return_an_operand(name: str) -> None:
    """maximum, minimum, fmax and fmin return one operand's bits, the right one; NaN wins in the first two only."""
    left, right = oracle.all_pairs(oracle.edge_values(name))
    either, both = np.isnan(left) | np.isnan(right), np.isnan(left) & np.isnan(right)
    for function, way, absent in chain(
        (("maximum", np.greater_equal, either), ("minimum", np.less_equal, either)),
        (("fmax", np.greater_equal, both), ("fmin", np.less_equal, both)),
    ):
        found = oracle.computed(name, function, left, right).astype(np.float64)
        assert np.array_equal(np.isnan(found), absent)
        for operand in (left, right):
            assert (way(found, operand) | np.isnan(operand) | absent).all()
        bits = found.view(np.uint64)
        assert ((bits == left.view(np.uint64)) | (bits == right.view(np.uint64)) | absent).all()
