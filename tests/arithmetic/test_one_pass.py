"""Operation and rounding in one compiled pass: the bits of the one after the other, in every layout, NumPy's flags."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import mpfr_oracle as oracle
import numpy as np
import numpy.typing as npt
import pytest

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.rounding import narrow, one_pass

Singles = npt.NDArray[np.float32]

CARRIED = [ufunc for ufunc, way in WAYS.items() if way == "carrier"]
BINARY = [ufunc for ufunc in CARRIED if ufunc.nin == 2]
NARROW = ["float16", "bfloat16"]
without_numba = pytest.mark.skipif(compiled.kernel("words") is None, reason="nothing is compiled")


def named(ufunc: np.ufunc) -> str:
    """Return the name of a ufunc, for a test's name."""
    return ufunc.__name__


def values(name: str, seed: int, count: int = 20_000) -> Singles:
    """Return values of a format: random ones of every exponent, all edges, zeros of both signs, infinities and NaN."""
    edges = np.append(oracle.edge_values(name), [0.0, -0.0, np.inf, -np.inf, np.nan])
    random = oracle.random_pairs(name, count, seed)[0]
    found = np.random.default_rng(seed).permutation(np.concatenate([edges, random]))
    return found[:count].astype(np.float32)


def one_after_the_other(ufunc: np.ufunc, operands: Any, name: str) -> Any:
    """Return the operation in float64, which is right to 53 bits, narrowed by NumPy's code: another way altogether.

    For + - * / and the square root of up to 11 bits a first rounding to 53 is innocuous.
    """
    with np.errstate(all="ignore"):
        wide = ufunc(*(np.asarray(operand, np.float64) for operand in operands))
        return np.asarray(narrow(np.asarray(wide), FORMATS[name]))


def alike(one: Any, other: Any) -> bool:
    """Whether two arrays have the same shape and bits; all NaNs count as one."""
    one, other = np.asarray(one), np.asarray(other)
    same = (one.view(np.uint32) == other.view(np.uint32)) | (np.isnan(one) & np.isnan(other))
    return bool(one.dtype == other.dtype == np.float32 and one.shape == other.shape and same.all())


@pytest.mark.parametrize("ufunc", CARRIED, ids=named)
@pytest.mark.parametrize("name", NARROW)
def test_every_way_of_calling_rounds_alike(name: str, ufunc: np.ufunc) -> None:
    """Dense, with a number on either side, strided, backwards, in Fortran order, broadcast, in place, overlapping."""
    compute = arithmetic_named(name).direct[ufunc]
    left, right = values(name, 1), values(name, 2)
    tall, wide = left.reshape(100, 200), np.asfortranarray(right.reshape(100, 200))
    number = np.array(np.float32(0.75))
    cases = [
        (left, right), (left[::2], right[1::2]), (left[::-1], right), (tall, tall), (wide, wide), (tall, wide),
        (tall.T, wide.T), (left, number), (number, right), (left[::3], number), (tall, right[:200]),
        (tall, tall[:, :1]), (tall[:, :1], tall[:1]), (left[:1], right), (left[:0], right[:0]),
        (left[5:6], right[5:6]), (left, left),
        *((left[:n], right[-n:]) for n in range(2, 40)),
    ]  # fmt: skip
    for case in cases:
        operands = case[: ufunc.nin]
        if ufunc.nin == 1 and not case[0].ndim:
            continue
        want = one_after_the_other(ufunc, operands, name)
        with np.errstate(all="ignore"):
            plain = ufunc(*operands)
            found = compute(*operands)
            assert alike(found, want)
            assert found.strides == np.asarray(plain).strides
            out = np.full_like(found, 7.0)
            assert compute(*operands, out=out) is out
            assert alike(out, want)
    changing(compute, ufunc, left, right, name)


def changing(compute: Callable[..., Any], ufunc: np.ufunc, left: Singles, right: Singles, name: str) -> None:
    """Compare what is written over an operand, over a part of one, and through every second place."""
    places: tuple[Any, ...] = (slice(None), slice(None, None, 2), slice(None, None, -1))
    for place in places:
        for first, second in ((left, right), (left, np.array(np.float32(1.5))), (np.array(np.float32(1.5)), right)):
            operands = [operand.copy()[place] if operand.ndim else operand for operand in (first, second)][: ufunc.nin]
            for target in (operand for operand in operands if operand.ndim):
                twins = [operand.copy() for operand in operands]
                want = one_after_the_other(ufunc, twins, name)
                own = [twin if operand is not target else target for operand, twin in zip(operands, twins, strict=True)]
                kept = target.copy()
                with np.errstate(all="ignore"):
                    compute(*own, out=target)
                assert alike(np.array(target), want)
                target[...] = kept
    own = left.copy()
    want = one_after_the_other(ufunc, (own[:-1], own[1:])[: ufunc.nin], name)
    with np.errstate(all="ignore"):
        compute(*(own[:-1], own[1:])[: ufunc.nin], out=own[1:])
    assert alike(np.array(own[1:]), want)


@pytest.mark.parametrize("ufunc", CARRIED, ids=named)
@pytest.mark.parametrize("name", NARROW)
def test_one_value_stays_a_scalar(name: str, ufunc: np.ufunc) -> None:
    """Arrays without axes give a NumPy scalar, as they do in plain code."""
    operands = [np.array(np.float32(x)) for x in (0.3, 0.7)][: ufunc.nin]
    found = arithmetic_named(name).direct[ufunc](*operands)
    assert type(found) is np.float32
    assert alike(found, one_after_the_other(ufunc, operands, name))


@without_numba
@pytest.mark.parametrize("name", NARROW)
def test_the_flags_are_those_of_the_operation(name: str) -> None:
    """Where NumPy is to raise: NaN, infinity and what is rounded to infinity pass; a division by zero raises."""
    top = np.full(9, FORMATS[name].max_finite, np.float32)
    quiet = np.array([np.nan, np.inf, -np.inf, 0.0, -0.0, 1.0, 3e-8, -3e-8, 2.0], np.float32)
    add, divide, alone = (one_pass(FORMATS[name], ufunc) for ufunc in (np.add, np.divide, np.positive))
    assert add is not None
    assert divide is not None
    assert alone is not None
    with np.errstate(all="raise", under="ignore"):
        add(quiet, np.zeros(9, np.float32))
        alone(np.append(quiet, np.float32(3e38)))
        if name == "float16":
            assert np.isinf(add(top, top)).all()
        with pytest.raises(FloatingPointError):
            divide(top, np.zeros(9, np.float32))
        with pytest.raises(FloatingPointError):
            divide(np.zeros(9, np.float32), np.zeros(9, np.float32))


@pytest.mark.parametrize("name", oracle.ALL)
def test_the_direct_way_is_that_of_apply(name: str) -> None:
    """Every ufunc of `direct`, on values of every kind: the bits of `apply`, whose operator makes two passes."""
    arithmetic, other = arithmetic_named(name), arithmetic_named(name)
    kind = FORMATS[name].carrier
    left = oracle.edge_values(name).astype(kind)
    right = np.random.default_rng(3).permutation(left)
    assert {np.add, np.sqrt, np.maximum, np.exp, np.less} <= arithmetic.direct.keys() or name == "tf32"
    with np.errstate(all="ignore"):
        for ufunc, compute in list(arithmetic.direct.items()):
            operands = [left, right][: ufunc.nin]
            found = np.asarray(compute(*operands))
            want = np.asarray(other.apply(ufunc, operands, call=ufunc))
            assert found.dtype == want.dtype
            assert np.array_equal(found, want, equal_nan=found.dtype.kind == "f"), ufunc
            if found.dtype.kind == "f":
                assert np.array_equal(np.signbit(found[~np.isnan(found)]), np.signbit(want[~np.isnan(want)]))


@pytest.mark.parametrize("name", oracle.ALL)
@pytest.mark.parametrize("number", [0.0, -0.0, 0, 0.1, 3, -1.0, 2**70, 1e300, float("nan"), np.float64(0.3)])
def test_a_weak_number_is_the_constant(name: str, number: Any) -> None:
    """Rounded once, of the carrier's type, zeros with their own sign also after one of the other sign."""
    arithmetic = arithmetic_named(name)
    for given in (-0.0, 0.0, number, number):
        found, want = arithmetic.weak(given), float(arithmetic.constant(given))
        assert name == "float64" or found.dtype == FORMATS[name].carrier
        assert float(found) == want or np.isnan([float(found), want]).all()
        assert np.signbit(float(found)) == np.signbit(want) or np.isnan(want)


def test_other_modes_have_no_direct_way() -> None:
    """What is directed, flushed or to be fused goes through `apply`."""
    form = FORMATS["float16"]
    kind = type(arithmetic_named("float16"))
    assert kind(format=form, rounding="up").direct == {}
    assert kind(format=form, subnormals="flushed").direct == {}
    assert kind(format=form, fused=True).direct == {}
