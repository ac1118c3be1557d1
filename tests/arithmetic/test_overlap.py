"""A target that overlaps its operands: NumPy's rule, that the result is as if there were no overlap, in every mode."""

from __future__ import annotations

from typing import Any

import mpfr_oracle as oracle
import numpy as np
import numpy.typing as npt
import pytest

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.elementary import WAYS, ways
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.stochastic import Stochastic

COUNT = 1200
# A target and two operands in one array of COUNT numbers, each as a view of it; the second lies elsewhere if None.
PLACES: dict[str, tuple[Any, Any, Any]] = {
    "one further": (np.s_[1:], np.s_[:-1], None),
    "one back": (np.s_[:-1], np.s_[1:], None),
    "three further, both": (np.s_[3:], np.s_[:-3], np.s_[1:-2]),
    "three back, both": (np.s_[:-3], np.s_[3:], np.s_[2:-1]),
    "one side further, the other back": (np.s_[4:-4], np.s_[:-8], np.s_[8:]),
    "backwards": (np.s_[:], np.s_[::-1], None),
    "backwards onto itself": (np.s_[::-1], np.s_[:], np.s_[::-1]),
    "every second": (np.s_[: COUNT // 2], np.s_[::2], np.s_[1::2]),
    "into every second": (np.s_[::2], np.s_[: COUNT // 2], np.s_[COUNT // 2 :]),
    "one number of it": (np.s_[:], np.s_[:], np.s_[5:6]),
    "one number alone": (np.s_[:], np.s_[7:8], None),
    "itself": (np.s_[:], np.s_[:], np.s_[:]),
}


@pytest.fixture(params=[True, False], ids=["compiled", "numpy"], autouse=True)
def way(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> None:
    """Run with the compiled loops and without."""
    if not request.param:
        monkeypatch.setattr(compiled, "kernel", lambda name: None)
    elif compiled.kernel("words") is None:
        pytest.skip("nothing is compiled")


def arithmetic_in(name: str, rounding: Any) -> Arithmetic:
    """Return a new arithmetic, whose random numbers begin anew."""
    stream = Stochastic(1, 2, 3) if rounding == "stochastic" else None
    return Arithmetic(format=FORMATS[name], rounding=rounding, stream=stream)


def numbers(name: str, seed: int) -> npt.NDArray[Any]:
    """Return COUNT values of a format, of close exponents, with edges among them; NaN left out, which has many bits."""
    left = oracle.random_pairs(name, 2 * COUNT, seed)[0][COUNT:]
    found = np.where(np.isnan(left), 1.0, left)
    found[::9] = np.random.default_rng(seed).choice(oracle.edge_values(name)[:-1], found[::9].size)
    return np.where(np.isnan(found), 1.0, found).astype(FORMATS[name].carrier)


@pytest.mark.parametrize("place", PLACES)
@pytest.mark.parametrize("rounding", ["nearest", "up", "stochastic"])
@pytest.mark.parametrize("name", oracle.ALL)
def test_a_target_may_overlap_its_operands(name: str, rounding: str, place: str) -> None:
    """Every ufunc with a number for a result: the target holds what copies of the operands give, by both doors.

    Where the format's functions are NumPy's own it holds what plain NumPy puts there: its bits vary with the layout.
    """
    base, other = numbers(name, 71), numbers(name, 72)
    into, first, second = PLACES[place]
    wrong = []
    for ufunc in (ufunc for ufunc, kind in WAYS.items() if kind != "truth"):
        whole = base.copy()
        apart = whole[second] if second is not None else other[: whole[into].size]
        operands = [whole[first], apart][: ufunc.nin]
        if np.broadcast_shapes(*(operand.shape for operand in operands)) != whole[into].shape:
            operands = [np.broadcast_to(operand, whole[into].shape) for operand in operands]
        with np.errstate(all="ignore"):
            want = arithmetic_in(name, rounding).apply(ufunc, [operand.copy() for operand in operands])
            target = whole[into]
            if ways(FORMATS[name], rounding)[ufunc] == "native":  # type: ignore[arg-type]
                ufunc(*operands, out=target)
                want = target.copy()
                whole[...] = base
            found = arithmetic_in(name, rounding).apply(ufunc, operands, out=target)
            assert found is target
            if not same(target, want):
                wrong.append(ufunc.__name__)
            direct = arithmetic_in(name, rounding).direct.get(ufunc)
            if direct is not None:
                whole[...] = base
                direct(*operands, out=target)
                if not same(target, want):
                    wrong.append(f"direct {ufunc.__name__}")
    assert wrong == []


@pytest.mark.parametrize("name", ["float32", "float64"])
def test_copies_give_what_numpy_gives_for_overlapping_operands(name: str) -> None:
    """The other side of the comparison, where plain NumPy computes: its own overlapping result is that of copies."""
    base = numbers(name, 73)
    for ufunc in (np.add, np.multiply, np.sqrt, np.tanh):
        plain, ours = base.copy(), base.copy()
        with np.errstate(all="ignore"):
            ufunc(*(plain[:-3], plain[1:-2])[: ufunc.nin], out=plain[3:])
            arithmetic_in(name, "nearest").apply(ufunc, (ours[:-3], ours[1:-2])[: ufunc.nin], out=ours[3:])
        assert same(plain, ours)


@pytest.mark.parametrize("rounding", ["nearest", "up", "stochastic"])
@pytest.mark.parametrize("name", oracle.ALL)
def test_the_target_of_a_fused_product_and_sum_may_overlap(name: str, rounding: str) -> None:
    """Also of three operands, each shifted by another distance."""
    base = numbers(name, 74)
    with np.errstate(all="ignore"):
        copies = (base[:-4].copy(), base[1:-3].copy(), base[4:].copy())
        want = arithmetic_in(name, rounding).fma(*copies)
        arithmetic_in(name, rounding).fma(base[:-4], base[1:-3], base[4:], out=base[2:-2])
    assert same(base[2:-2], want)


def same(one: Any, other: Any) -> bool:
    """Whether two arrays have the same bits; all NaNs count as one."""
    words = f"u{one.dtype.itemsize}"
    one, other = np.ascontiguousarray(one), np.ascontiguousarray(other)
    return bool(((one.view(words) == other.view(words)) | (np.isnan(one) & np.isnan(other))).all())
