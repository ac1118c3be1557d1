"""The watch alone: where float32 stops, over millions of steps at once, and what is not counted."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from narrowgauge.arithmetic.formats import format_named
from narrowgauge.conduct.rangewatch import RangeWatch, Seen

SINGLE, HALF = map(format_named, ("float32", "float16"))


class Somewhere:
    """A setting outside any of the user's lines, in a call of so many paths."""

    def __init__(self, paths: int) -> None:
        self.paths = paths

    def frame(self) -> None:
        return None

    def where(self) -> None:
        return None


def seen(form: Any, operation: str, operands: tuple[Any, ...], result: Any, route: Any = "rounded") -> Seen:
    """What a watch sees in one operation on an axis of paths."""
    paths = np.shape(result)[-1]
    watch = RangeWatch(form)
    watch.expect(paths)
    watch.begin()
    with np.errstate(all="ignore"):
        watch.saw(Somewhere(paths), operation, route, operands, result)  # type: ignore[arg-type]
    return watch.harvest()


def recurrence(terms: np.ndarray[Any, Any]) -> tuple[np.ndarray[Any, Any], np.ndarray[Any, Any]]:
    """Sums before and after each term: NumPy's cumsum adds one after the other in the type of its argument."""
    after = np.cumsum(terms)
    return np.concatenate([np.zeros(1, terms.dtype), after[:-1]]), after


def test_a_float32_sum_of_ones_stops_at_two_to_the_24th() -> None:
    """16,777,216 (computed): each step of the recurrence stands for a path, so that all are looked at in one call."""
    ones = np.ones(2**24 + 3, np.float32)
    before, after = recurrence(ones)
    lost = seen(SINGLE, "add", (before, ones), after).lost
    assert np.flatnonzero(lost).tolist() == [2**24, 2**24 + 1, 2**24 + 2]


def test_a_float32_harmonic_sum_stops_at_the_published_term() -> None:
    """n = 2,097,152 at 15.403682708740234: Irish Math. Soc. Bulletin 71, 2013, and computed; nothing is lost before."""
    n = np.arange(1, 2**21 + 50)
    terms = (1.0 / n).astype(np.float32)
    before, after = recurrence(terms)
    lost = np.flatnonzero(seen(SINGLE, "add", (before, terms), after).lost)
    assert n[lost[0]] == 2_097_152
    assert lost.size == 50, "and everything after it"
    assert float(after[lost[0]]) == 15.403682708740234


@pytest.mark.parametrize(
    ("operation", "operands", "result", "counts"),
    [
        ("multiply", (2.0**-20, 2.0**-20), 0.0, (0, 1)),
        ("multiply", (0.0, 2.0**-20), 0.0, (0, 0)),
        ("divide", (1.0, np.inf), 0.0, (0, 0)),
        ("divide", (1.0, 0.0), np.inf, (0, 0)),
        ("divide", (60000.0, 0.5), np.inf, (1, 0)),
        ("log", (1.0,), 0.0, (0, 0)),
        ("log", (0.0,), -np.inf, (0, 0)),
        ("exp", (-60.0,), 0.0, (0, 1)),
        ("exp", (60.0,), np.inf, (1, 0)),
        ("exp", (np.inf,), np.inf, (0, 0)),
        ("power", (0.0, -1.0), np.inf, (0, 0)),
        ("subtract", (3.0, 3.0), 0.0, (0, 0)),
        ("subtract", (np.inf, np.inf), np.nan, (0, 0)),
        ("sum", (np.array([60000.0, 60000.0]),), np.inf, (1, 0)),
    ],
)
def test_overflow_and_underflow_are_of_finite_operands_and_no_pole(
    operation: str, operands: tuple[Any, ...], result: float, counts: tuple[int, int]
) -> None:
    """float16: overflows and underflows of one result."""
    arrays = tuple(np.atleast_1d(np.asarray(one, np.float32)) for one in operands)
    found = seen(HALF, operation, arrays, np.array([result], np.float32))
    (line,) = found.lines.values()
    assert (line.overflows, line.underflows) == counts
    assert (found.first is not None) == (not np.isfinite(result))


@pytest.mark.parametrize(
    ("one", "other", "result", "lost"),
    [
        (2048.0, 1.0, 2048.0, 1),
        (1.0, -2048.0, -2048.0, 1),
        (2048.0, 0.0, 2048.0, 0),
        (0.0, 0.0, 0.0, 0),
        (np.inf, 1.0, np.inf, 0),
        (2.0, 2.0, 4.0, 0),
    ],
)
def test_a_lost_addition_leaves_the_larger_operand_as_it_was(
    one: float, other: float, result: float, lost: int
) -> None:
    """Either operand may be the larger; adding 0 loses nothing, and an infinity was lost before."""
    arrays = (np.array([one], np.float32), np.array([other], np.float32))
    (line,) = seen(HALF, "add", arrays, np.array([result], np.float32)).lines.values()
    assert line.lost == lost


def test_what_never_rounds_is_passed_over_but_for_the_one_that_may_be_nan() -> None:
    """A maximum makes no new magnitudes; fmod by 0 is not a number."""
    zeros = np.zeros(2, np.float32)
    assert seen(HALF, "maximum", (zeros, zeros), zeros, "exact").lines == {}
    first = seen(HALF, "fmod", (zeros + 1, zeros), zeros + np.nan, "exact").first
    assert first is not None
    assert (first.kind, first.operands, first.path) == ("not a number", (1.0, 0.0), 0)


def calls(watch: RangeWatch, *operations: tuple[str, float, float, float]) -> None:
    for operation, one, other, result in operations:
        arrays = (np.array([one], np.float32), np.array([other], np.float32))
        watch.saw(Somewhere(1), operation, "rounded", arrays, np.array([result], np.float32))  # type: ignore[arg-type]


def test_the_first_is_first_in_time_whatever_place_is_looked_at_first() -> None:
    """The product runs before the sum, and again after it; the sum is infinite before the product is."""
    watch = RangeWatch(HALF)
    watch.expect(1)
    watch.begin()
    calls(watch, ("multiply", 2.0, 2.0, 4.0), ("add", 65504.0, 65504.0, np.inf), ("multiply", 65504.0, 2.0, np.inf))
    first = watch.harvest().first
    assert first is not None
    assert (first.operation, first.step) == ("add", 0)


def test_each_call_counts_its_steps_anew() -> None:
    """A loss on the second step of the second call is on step 1, after three steps in the first call."""
    watch = RangeWatch(HALF)
    watch.expect(2)
    watch.begin(0)
    calls(watch, *[("add", 1.0, 1.0, 2.0)] * 3)
    watch.begin(1)
    calls(watch, ("add", 1.0, 1.0, 2.0), ("add", 2048.0, 1.0, 2048.0))
    seen = watch.harvest()
    assert [line.first_lost for line in seen.lines.values()] == [1]
    assert seen.lost.tolist() == [0.0, 1.0]
