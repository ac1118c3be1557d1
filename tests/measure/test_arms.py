"""Which arms an audit runs, and which corrections between them it measures."""

from __future__ import annotations

import itertools

import pytest

from narrowgauge.measure.arms import REFERENCE, arms_of, pairs_of

# Bits of precision: IEEE 754-2019, table 3.5, and for bfloat16 its vendor's description (both recalled from memory).
PRECISION = {"bfloat16": 8, "float16": 11, "float32": 24, "float64": 53}
DEFAULT = tuple(PRECISION)


def subsets(names: tuple[str, ...]) -> list[tuple[str, ...]]:
    return [chosen for size in range(len(names) + 1) for chosen in itertools.combinations(names, size)]


def test_the_reference_comes_first_then_by_precision() -> None:
    """Of the default formats the reference, then bfloat16, float16, float32, in whatever order they are named."""
    assert REFERENCE == "float64"
    for order in itertools.permutations(DEFAULT):
        assert arms_of([*order, *order]) == ("float64", "bfloat16", "float16", "float32")


@pytest.mark.parametrize("names", subsets(("float16", "bfloat16", "float32")))
def test_arms_by_their_rule(names: tuple[str, ...]) -> None:
    """The reference is always there, each named format once, less precise before more precise."""
    first, *rest = arms_of(names)
    assert first == "float64"
    assert sorted(rest) == sorted(names)
    assert [PRECISION[name] for name in rest] == sorted(PRECISION[name] for name in rest)


def test_pairs_of_the_default_audit() -> None:
    """With float32 and float64 as wide formats: every narrow arm to the reference, 16-bit arms to float32 too."""
    assert set(pairs_of(arms_of([*DEFAULT]), ["float32", "float64"])) == {
        ("bfloat16", "float32"),
        ("bfloat16", "float64"),
        ("float16", "float32"),
        ("float16", "float64"),
        ("float32", "float64"),
    }


@pytest.mark.parametrize("wide", subsets(DEFAULT))
@pytest.mark.parametrize("arms", subsets(("float16", "bfloat16", "float32")))
def test_pairs_by_their_rule(arms: tuple[str, ...], wide: tuple[str, ...]) -> None:
    """Once each: from every arm to the reference, which judges bias, and to each wide format of more precision.

    So every split that a scheme may use, and every arm alone, has its correction.
    """
    found = pairs_of(arms_of([*arms, *wide]), wide)
    runs = {"float64", *arms, *wide}
    wanted = {(a, b) for a in runs for b in {"float64", *wide} if PRECISION[b] > PRECISION[a]}
    assert len(found) == len(set(found))
    assert set(found) == wanted
    assert {a for a, b in found if b == "float64"} == runs - {"float64"}


def test_arms_with_approximate_draws_come_after_the_exact_ones() -> None:
    """In the same order; the reference stays first."""
    names = ["float64/approximate", "float16", "float32/approximate", "bfloat16/approximate", "float64"]
    wanted = ("float64", "float16", "bfloat16/approximate", "float32/approximate", "float64/approximate")
    assert arms_of(names) == wanted


def test_pairs_of_approximate_draws() -> None:
    """To the reference, and to each wide format of at least the arm's precision; nothing is corrected to them."""
    arms = arms_of(["float16", "float32", "float16/approximate", "float32/approximate", "float64/approximate"])
    found = {(a, b) for a, b in pairs_of(arms, ["float32"]) if "/" in a + b}
    assert found == {
        ("float16/approximate", "float32"),
        ("float16/approximate", "float64"),
        ("float32/approximate", "float32"),
        ("float32/approximate", "float64"),
        ("float64/approximate", "float64"),
    }
