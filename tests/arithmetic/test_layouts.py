"""Shapes and strides: rounding in place changes exactly the view it was given, however it lies in memory."""

from __future__ import annotations

from collections.abc import Callable
from threading import Thread
from typing import Any, Literal

import mpfr_oracle as oracle
import numpy as np
import numpy.typing as npt
import pytest

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.rounding import narrow, round_carrier
from narrowgauge.arithmetic.scratch import words32

View = Callable[[npt.NDArray[Any]], npt.NDArray[Any]]

VIEWS: dict[str, View] = {
    "whole": lambda base: base,
    "every second": lambda base: base[..., ::2],
    "reversed": lambda base: base[::-1, ::-1, ::-1],
    "axes moved": lambda base: base.transpose(2, 0, 1),
    "axes moved, then cut": lambda base: base.transpose(2, 1, 0)[5:40:3, 1:],
    "one slice": lambda base: base[:, 3],
    "a block": lambda base: base[2:6, 1:3, 7:31],
    "every third, backwards": lambda base: base[::-3],
    "one element": lambda base: base[4:5, 2:3, 4:5],
    "no element": lambda base: base[4:4],
    "0-d": lambda base: base[4, 2, 4, ...],
}


def mixed(name: str, order: Literal["C", "F"]) -> npt.NDArray[np.float64]:
    """Return (8, 4, 64) values that take every path: normal, subnormal, overflowing, infinite, NaN, zeros."""
    form = FORMATS[name]
    generator = np.random.default_rng(11)
    flat = generator.standard_normal(8 * 4 * 64)
    flat[::5] *= form.min_normal
    flat[1::7] = generator.uniform(-1.0, 1.0, flat[1::7].size) * form.max_finite
    flat[1::14] *= 1.5 if name != "float64" else 1.0
    flat[2::11] = generator.choice([np.inf, -np.inf, np.nan, 0.0, -0.0], flat[2::11].size)
    values = flat.reshape(8, 4, 64)
    values[4, 2, 4] = 0.7 * form.min_normal
    return np.array(values, order=order)


@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize("view", list(VIEWS))
@pytest.mark.parametrize("name", ["e4m3", "tf32", "float16", "bfloat16"])
def test_a_view_is_rounded_in_place_and_nothing_beside_it(name: str, view: str, order: Literal["C", "F"]) -> None:
    """The view holds MPFR's roundings, the rest of its array keeps every bit, the view itself is returned."""
    with np.errstate(over="ignore"):
        base = np.array(mixed(name, order), np.float32, order=order)
    before = base.copy(order="K")
    mask = np.zeros(base.shape, bool)
    VIEWS[view](mask)[...] = True
    part = VIEWS[view](base)
    values = np.array(part, np.float64, order="C").reshape(-1)
    assert round_carrier(part, FORMATS[name]) is part
    want = oracle.fitted(oracle.reckon(float, oracle.to_mpfr(values, name)), name)
    assert oracle.differ(np.array(part, order="C").reshape(-1), want).size == 0
    assert np.array_equal(base.view(np.uint32)[~mask], before.view(np.uint32)[~mask])


@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize("view", list(VIEWS))
@pytest.mark.parametrize("name", oracle.NAMES)
def test_narrowing_keeps_the_shape_whatever_the_strides(name: str, view: str, order: Literal["C", "F"]) -> None:
    """The result has the argument's shape and MPFR's values in the argument's places."""
    values = VIEWS[view](mixed(name, order))
    found = narrow(values, FORMATS[name])
    assert found.shape == values.shape
    want = oracle.reckon(float, oracle.to_mpfr(np.array(values, order="C").reshape(-1), name))
    assert oracle.differ(np.array(found, order="C").reshape(-1), want).size == 0


@pytest.mark.parametrize("fast", [True, False], ids=["compiled", "numpy"])
@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize("view", list(VIEWS))
@pytest.mark.parametrize("rounding", list(oracle.MODES))
def test_float64_is_computed_whatever_the_strides(
    rounding: Any, view: str, order: Literal["C", "F"], fast: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Operations in every mode on moderate numbers: MPFR's results in the operands' places, also with one constant."""
    if not fast:
        monkeypatch.setattr(compiled, "kernel", lambda name: None)
    base = np.random.default_rng(13).standard_normal((8, 4, 64))
    left, right = (VIEWS[view](np.array(part, order=order)) for part in (base, np.roll(base, 1)))
    form = oracle.context("float64", rounding)
    arithmetic = Arithmetic(format=FORMATS["float64"], rounding=rounding)
    few = np.broadcast_to(right[:1], left.shape) if left.ndim else right
    for operands in ((left, right), (left, few), (left, 0.3), (few, left)):
        flat = [np.array(np.broadcast_to(operand, left.shape), order="C").reshape(-1) for operand in operands]
        numbers = [oracle.to_mpfr(operand, "float64") for operand in flat]
        for function, (theirs, count) in oracle.BASIC.items():
            if function == "sqrt":
                continue
            found = arithmetic.apply(getattr(np, function), operands[:count])
            want = oracle.reckon(getattr(form, theirs), *numbers[:count])
            assert np.shape(found) == left.shape
            assert oracle.differ(np.array(found, order="C").reshape(-1), want).size == 0, function
        for function, call in {"sqrt": lambda x: form.sqrt(abs(x)), "reciprocal": lambda x: form.div(1, x)}.items():
            operand = np.broadcast_to(operands[0], left.shape)
            operand = np.abs(operand) if function == "sqrt" else operand
            found = arithmetic.apply(getattr(np, function), (operand,))
            assert oracle.differ(np.array(found, order="C").reshape(-1), oracle.reckon(call, numbers[0])).size == 0


@pytest.mark.parametrize("shape", [(0,), (0, 3), (3, 0)])
@pytest.mark.parametrize("name", oracle.NAMES)
def test_empty_arrays_stay_empty(name: str, shape: tuple[int, ...]) -> None:
    """No element, no rounding: the shape and the carrier's type remain."""
    form = FORMATS[name]
    found = narrow(np.empty(shape), form)
    assert (found.shape, found.dtype) == (shape, form.carrier)
    carrier: npt.NDArray[np.floating[Any]] = np.empty(shape, form.carrier)
    assert round_carrier(carrier, form) is carrier


@pytest.mark.parametrize("value", [1.0001, 1e-6, -1e-9, 7e4, 0.0, np.inf, np.nan])
@pytest.mark.parametrize("name", oracle.NAMES)
def test_arrays_without_axes_are_rounded(name: str, value: float) -> None:
    """A 0-d array stays one and holds what a 1-d array of one value holds, subnormals included."""
    form = FORMATS[name]
    want = oracle.reckon(float, oracle.to_mpfr(np.array([value]), name))
    found = narrow(np.array(value), form)
    assert found.shape == ()
    assert oracle.differ(found.reshape(1), want).size == 0
    carrier: npt.NDArray[np.floating[Any]] = np.array(value, form.carrier)
    want = oracle.reckon(float, oracle.to_mpfr(carrier.reshape(1).astype(np.float64), name))
    assert round_carrier(carrier, form) is carrier
    assert oracle.differ(carrier.reshape(1), want).size == 0


@pytest.mark.parametrize("name", ["float32", "float64"])
def test_native_carriers_are_returned_as_they_are(name: str) -> None:
    """Their arithmetic has rounded already: not a bit changes."""
    normals = np.random.default_rng(12).standard_normal(100)
    carrier: npt.NDArray[np.floating[Any]] = normals.astype(FORMATS[name].carrier)
    before = carrier.tobytes()
    assert round_carrier(carrier, FORMATS[name]) is carrier
    assert carrier.tobytes() == before


def test_threads_do_not_share_their_work_space() -> None:
    """Four threads that round arrays of different sizes at once get what each gets alone."""
    form = FORMATS["float16"]
    inputs = [np.random.default_rng(seed).standard_normal(1000 * seed + 7).astype(np.float32) for seed in range(4)]
    alone = [round_carrier(values.copy(), form) for values in inputs]
    wrong: list[int] = []

    def work(index: int) -> None:
        for _ in range(300):
            if not np.array_equal(round_carrier(inputs[index].copy(), form), alone[index]):
                wrong.append(index)

    threads = [Thread(target=work, args=(index,)) for index in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert wrong == []


def test_a_place_that_grew_keeps_no_smaller_array() -> None:
    """Every shape asked of one place is a part of the largest array that was needed, also of shapes known before."""
    small = words32("growing", (2, 3), 6)
    assert words32("growing", (2, 3), 6) is small
    large = words32("growing", (50_000,), 50_000)
    again = words32("growing", (2, 3), 6)
    assert np.shares_memory(again, large)
    assert not np.shares_memory(small, large)
    many = [words32("growing", (1, count), count) for count in range(1, 600)]
    assert all(np.shares_memory(part, large) for part in many)
