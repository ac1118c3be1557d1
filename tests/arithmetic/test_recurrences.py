"""Whole recurrences: bit for bit what NumPy's float16 and ml_dtypes' bfloat16 arithmetic give, step after step."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import mpfr_oracle as oracle
import numpy as np
import numpy.typing as npt
import pytest

from narrowgauge.arithmetic.arithmetic import Arithmetic, arithmetic_named

Operation = Callable[..., Any]

STEPS, PATHS = 64, 4096


def emulated(arithmetic: Arithmetic) -> Operation:
    """Return a function that applies a ufunc to carriers and rounds, as the program does."""
    return lambda ufunc, *operands: arithmetic.apply(ufunc, operands)


def plain(ufunc: np.ufunc, *operands: Any) -> Any:
    """Apply a ufunc in the storage type itself: an implementation of this arithmetic that is not ours."""
    return ufunc(*operands)


def geometric(do: Operation, start: Any, constants: list[Any], increments: Any) -> list[Any]:
    """Geometric Brownian motion, Euler: s + (s r h + s v dW), every state from first to last."""
    drift, volatility = constants
    states = [start]
    for increment in increments:
        s = states[-1]
        change = do(np.add, do(np.multiply, s, drift), do(np.multiply, do(np.multiply, s, volatility), increment))
        states.append(do(np.add, s, change))
    return states


def square_root(do: Operation, start: Any, constants: list[Any], increments: Any) -> list[Any]:
    """Square-root process, Euler, full truncation: v + k h (m - v+) + x sqrt(v+) dW, every state."""
    pull, mean, vol, zero = constants
    states = [start]
    for increment in increments:
        v = states[-1]
        positive = do(np.maximum, v, zero)
        back = do(np.multiply, pull, do(np.subtract, mean, positive))
        noise = do(np.multiply, do(np.multiply, vol, do(np.sqrt, positive)), increment)
        states.append(do(np.add, do(np.add, v, back), noise))
    return states


def quotients(do: Operation, start: Any, constants: list[Any], increments: Any) -> list[Any]:
    """A rational recurrence that uses division and leaves the normal range: x / (1 + x^2) - x dW / (1 + x)."""
    (one,) = constants
    states = [start]
    for increment in increments:
        x = states[-1]
        first = do(np.divide, x, do(np.add, one, do(np.multiply, x, x)))
        second = do(np.divide, do(np.multiply, x, increment), do(np.add, one, x))
        states.append(do(np.subtract, first, second))
    return states


RECURRENCES: dict[str, tuple[Callable[..., list[Any]], float, tuple[float, ...]]] = {
    "geometric": (geometric, 1.0, (0.05 / STEPS, 0.2)),
    "geometric at 100": (geometric, 100.0, (0.05 / STEPS, 0.4)),
    "square root": (square_root, 0.0175, (1.5768 / STEPS, 0.0398, 0.5751, 0.0)),
    "quotients": (quotients, 0.75, (1.0,)),
}


def run(
    name: str, recurrence: str, do: Operation, take: Callable[[npt.NDArray[Any]], npt.NDArray[Any]]
) -> npt.NDArray[Any]:
    """Return all states, (STEPS + 1, PATHS), from numbers of the format that `take` brings into the arm's type."""
    step, start, constants = RECURRENCES[recurrence]
    arithmetic = arithmetic_named(name)
    normals = np.random.default_rng(15).standard_normal((STEPS, PATHS)) / np.sqrt(STEPS)
    begin = take(np.full(PATHS, arithmetic.constant(start)))
    scalars = [take(np.array(arithmetic.constant(number)))[()] for number in constants]
    with np.errstate(all="ignore"):
        return np.array(step(do, begin, scalars, take(arithmetic.cast(normals))))


@pytest.mark.parametrize("recurrence", list(RECURRENCES))
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_every_state_of_every_path_has_the_storage_types_bits(name: str, recurrence: str) -> None:
    """64 steps of 4,096 paths equal the same recurrence in the storage type's own arithmetic."""
    form = arithmetic_named(name).format
    ours = run(name, recurrence, emulated(arithmetic_named(name)), lambda values: values.astype(form.carrier))
    theirs = run(name, recurrence, plain, lambda values: values.astype(form.storage))
    assert ours.dtype == form.carrier
    assert theirs.dtype == form.storage
    assert ours.shape == theirs.shape == (STEPS + 1, PATHS)
    assert oracle.differ(ours.reshape(-1), theirs.astype(np.float64).reshape(-1)).size == 0


@pytest.mark.parametrize("recurrence", list(RECURRENCES))
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_rounding_each_step_only_does_not_pass(name: str, recurrence: str) -> None:
    """Negative control: float32 within a step, rounded at its end, gives a tenth of the paths or more other bits."""
    arithmetic = arithmetic_named(name)
    ours = run(name, recurrence, emulated(arithmetic), lambda values: values.astype(np.float32))
    step, start, constants = RECURRENCES[recurrence]
    normals = np.random.default_rng(15).standard_normal((STEPS, PATHS)) / np.sqrt(STEPS)
    state: Any = np.full(PATHS, arithmetic.constant(start), np.float32)
    scalars = [arithmetic.constant(number) for number in constants]
    with np.errstate(all="ignore"):
        for increment in arithmetic.cast(normals):
            state = arithmetic.cast(step(plain, state, scalars, [increment])[-1])
    assert oracle.differ(ours[-1], state.astype(np.float64)).size > PATHS / 10


def recursive_sum(name: str, term: Callable[[int], Any], total: float, first: int, last: int) -> tuple[Any, int]:
    """Return the sum and the index of the first term that leaves it unchanged, adding in the format."""
    arithmetic = arithmetic_named(name)
    add = partial(arithmetic.apply, np.add)
    state = arithmetic.format.carrier.type(total)
    for index in range(first, last):
        following = add((state, term(index)))
        if following == state:
            return float(state), index
        state = following
    raise AssertionError(f"the sum still grows after {last} terms")


@pytest.mark.parametrize(
    ("name", "start", "stop"), [("float16", 0, 2048), ("bfloat16", 0, 256), ("float32", 16_777_000, 16_777_216)]
)
def test_a_sum_of_ones_stops_at_two_to_the_precision(name: str, start: int, stop: int) -> None:
    """Beyond 2^p one more is lost: a tie, and the sum is even. Computed from first principles."""
    assert recursive_sum(name, lambda _: 1.0, float(start), start + 1, stop + 10) == (float(stop), stop + 1)


@pytest.mark.parametrize(("name", "stop", "total"), [("float16", 513, 7.0859375), ("bfloat16", 65, 5.0625)])
def test_the_harmonic_sum_stops(name: str, stop: int, total: float) -> None:
    """1 + 1/2 + 1/3 ... in the format stops for good at these terms and values.

    Computed from first principles; that it stops in any format is in "To what does the harmonic series
    converge?", Irish Mathematical Society Bulletin 71, 2013.
    """
    arithmetic = arithmetic_named(name)
    one = arithmetic.format.carrier.type(1.0)

    def term(index: int) -> Any:
        return arithmetic.apply(np.divide, (one, arithmetic.constant(index)))

    assert recursive_sum(name, term, 0.0, 1, 1000) == (total, stop)


def test_the_harmonic_sum_of_binary32_stops_where_it_was_published() -> None:
    """In binary32 it stops at 15.403682708740234, n = 2,097,152.

    Source: "To what does the harmonic series converge?", Irish Mathematical Society Bulletin 71, 2013. NumPy's
    own running sum of binary32 brings us near the end; the last thousand terms are added here.
    """
    arithmetic = arithmetic_named("float32")
    reciprocals = arithmetic.apply(np.divide, (np.float32(1), np.arange(1, 2_096_152, dtype=np.float32)))
    near = float(np.add.accumulate(reciprocals)[-1])
    one = np.float32(1)

    def term(index: int) -> Any:
        return arithmetic.apply(np.divide, (one, arithmetic.constant(index)))

    assert recursive_sum("float32", term, near, 2_096_152, 2_097_200) == (15.403682708740234, 2_097_152)
