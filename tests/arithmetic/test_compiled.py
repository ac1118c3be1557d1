"""The compiled loops: the bits of NumPy's code on every value and layout."""

from __future__ import annotations

from collections.abc import Callable
from importlib import import_module
from typing import Any

import mpfr_oracle as oracle
import numpy as np
import pytest

from narrowgauge.arithmetic import compiled
from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.arithmetic.elementary import look_up
from narrowgauge.arithmetic.errorterms import odd_sum
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.kernels import LOOPS
from narrowgauge.arithmetic.rounding import Rounding, flush, narrow, round_carrier
from narrowgauge.arithmetic.stochastic import Stochastic

NARROW = [name for name in oracle.ALL if name not in ("float32", "float64")]
MODES: list[Rounding] = ["nearest", "zero", "up", "down", "stochastic"]

pytest.importorskip("numba")
if compiled.kernel("words") is None:
    pytest.skip("NARROWGAUGE_COMPILED=0", allow_module_level=True)


@pytest.fixture
def both(monkeypatch: pytest.MonkeyPatch) -> Callable[[Callable[[], Any]], tuple[Any, Any]]:
    """Return a function that computes something with the loops and without."""

    def computed(compute: Callable[[], Any]) -> tuple[Any, Any]:
        fast = np.array(compute())
        with monkeypatch.context() as patch:
            patch.setattr(compiled, "kernel", lambda name: None)
            return fast, np.array(compute())

    return computed


def alike(one: Any, other: Any) -> bool:
    """Whether two arrays have the same type, shape and bits; all NaNs count as one."""
    words = f"u{one.dtype.itemsize}"
    same = (one.view(words) == other.view(words)) | (np.isnan(one) & np.isnan(other))
    return bool(one.dtype == other.dtype and one.shape == other.shape and same.all())


def doubles(name: str) -> oracle.Doubles:
    """Return float64 of every kind: any pattern, around the format's range, its edges, midpoints, and beside them."""
    generator = np.random.default_rng(51)
    form = FORMATS[name]
    patterns = generator.integers(0, 2**64 - 1, 50_000, dtype=np.uint64, endpoint=True).view(np.float64)
    low, high = form.emin - form.precision - 3, form.emax + 2
    edges = oracle.edge_values(name)
    with np.errstate(all="ignore"):
        ranged = np.ldexp(generator.uniform(-2.0, 2.0, 100_000), generator.integers(low, high, 100_000))
        middles = (np.sort(edges)[1:] + np.sort(edges)[:-1]) / 2
        beside = [np.nextafter(part, side) for part in (edges, middles) for side in (-np.inf, np.inf)]
    return np.concatenate([patterns, ranged, edges, middles, *beside, [np.nan, -np.nan, np.inf, -np.inf, 0.0, -0.0]])


@pytest.mark.parametrize("name", NARROW)
def test_carriers_are_rounded_alike(name: str, both: Any) -> None:
    """200,000 float32 patterns of any kind, and every kind of value around the format's range."""
    patterns = np.random.default_rng(52).integers(0, 2**32 - 1, 200_000, dtype=np.uint32).view(np.float32)
    with np.errstate(all="ignore"):
        values = np.append(patterns, doubles(name).astype(np.float32))
    values[np.isnan(values)] = np.nan  # as float32 operations make them
    assert alike(*both(lambda: round_carrier(values.copy(), FORMATS[name])))


@pytest.mark.parametrize("flushed", [False, True], ids=["kept", "flushed"])
@pytest.mark.parametrize("rounding", MODES)
@pytest.mark.parametrize("name", oracle.ALL)
def test_doubles_are_narrowed_alike(name: str, rounding: Rounding, flushed: bool, both: Any) -> None:
    """Every kind of float64 in every mode, subnormals kept or flushed."""
    values = doubles(name)
    numbers = np.random.default_rng(53).random(values.size) if rounding == "stochastic" else None
    if numbers is not None:
        numbers[::5] = 0.0  # the number that moves everything but an exact result
    fast, slow = both(lambda: narrow(values, FORMATS[name], rounding, flushed=flushed, uniforms=numbers))
    assert alike(fast, slow)
    assert np.isnan(fast).sum() > 0
    assert (np.abs(fast[np.nonzero(fast)]) < FORMATS[name].min_normal).any() == (not flushed)


@pytest.mark.parametrize("name", oracle.ALL)
def test_flushing_is_alike_and_right(name: str, both: Any) -> None:
    """Magnitudes below the smallest normal number become zeros of their sign; nothing else moves, NaN included."""
    values = doubles(name).astype(FORMATS[name].carrier) if name == "float64" else narrow(doubles(name), FORMATS[name])
    fast, slow = both(lambda: flush(values.copy(), FORMATS[name]))
    assert alike(fast, slow)
    small = np.abs(values) < FORMATS[name].min_normal
    assert alike(fast, np.where(small, np.copysign(0, values), values).astype(values.dtype))


@pytest.mark.parametrize("name", [*oracle.SIXTEEN_BITS, *oracle.EIGHT_BITS])
def test_tables_are_read_alike(name: str, both: Any) -> None:
    """All values of the format, with and without a target, also the operand itself, strided and read-only."""
    values = oracle.all_values(name).astype(np.float32)
    want = look_up(np.exp, values, FORMATS[name], None)

    def into(operand: Any, out: Any) -> Any:
        return look_up(np.exp, operand, FORMATS[name], out)

    fixed = values.copy()
    fixed.setflags(write=False)
    wide = np.repeat(values, 2)
    for compute in (
        lambda: into(values, None),
        lambda: into(fixed, None),
        lambda: into(values, np.empty_like(values)),
        lambda: into(values.copy(), np.empty((values.size, 2), np.float32)[:, 1]),
        lambda: into(wide[::2], None),
        lambda: (own := values.copy(), into(own, own))[1],
    ):
        fast, slow = both(compute)
        assert alike(fast, slow)
        assert alike(fast, want)


def test_sums_are_made_odd_alike(both: Any) -> None:
    """The error term's side and the last bit, on pairs of every kind."""
    values = doubles("float32")
    left, right = values, np.random.default_rng(54).permutation(values)
    with np.errstate(all="ignore"):
        assert alike(*both(lambda: odd_sum(left, right, np.empty_like(left))))
        assert alike(*both(lambda: odd_sum(left, np.float64(0.1), np.empty_like(left))))


@pytest.mark.parametrize("rounding", MODES[1:])
@pytest.mark.parametrize("function", list(oracle.BASIC))
def test_moderate_operands_of_float64_are_computed_alike_and_right(function: str, rounding: Any, both: Any) -> None:
    """20,000 pairs of close exponents, zeros, and results beside powers of two; MPFR's bits but for the random mode.

    One number beyond 2^400 sends the whole array the general way, to the same bits, as small ones do.
    """
    left, right = (operand[20_000:] for operand in oracle.random_pairs("float64", 40_000, 57))
    special = ((0.0, 1.0), (-0.0, 1.0), (1.0, 2.0**-60), (-1.0, 2.0**-60), (1.0, -(2.0**-60)), (2.0, -0.75), (1.5, 1.5))
    special += ((1.0, -(2.0**-55)),) * 200  # a quarter of the way to the next number, which is half as far as above
    left, right = np.append(left, [pair[0] for pair in special]), np.append(right, [pair[1] for pair in special])
    operands = [left, right] if function != "sqrt" else [np.abs(left)]

    def computed(*given: oracle.Doubles) -> Any:
        mode: dict[str, Any] = {"stream": Stochastic(1, 1, 1)} if rounding == "stochastic" else {}
        return oracle.computed("float64", function, *given, rounding=rounding, **mode)

    fast, slow = both(lambda: computed(*operands))
    assert alike(fast, slow)
    huge = computed(*(np.append(operand, 2.0**500) for operand in operands))
    assert alike(fast, huge[:-1])
    small = [operand * scale for operand, scale in zip(operands, (2.0**-520, 2.0**-500), strict=False)]
    assert alike(*both(lambda: computed(*small)))
    if function == "divide":
        assert alike(*both(lambda: computed(left, right * 2.0**-1000)))
        assert alike(*both(lambda: computed(left * 2.0**-1000, right)))
    if rounding != "stochastic":
        form = getattr(oracle.context("float64", rounding), oracle.BASIC[function][0])
        want = oracle.reckon(form, *(oracle.to_mpfr(operand, "float64") for operand in operands))
        assert oracle.differ(fast, want).size == 0


def test_random_numbers_are_alike(both: Any) -> None:
    """The numbers of an operation, of any count."""
    for count in (0, 1, 7, 100_000):
        assert alike(*both(lambda count=count: Stochastic(1, 2, count).uniforms((count,))))


@pytest.mark.parametrize("view", ["C", "F", "every second", "backwards", "transposed", "0-d", "empty", "read-only"])
@pytest.mark.parametrize("rounding", MODES)
def test_layouts_do_not_matter(view: str, rounding: Rounding, both: Any) -> None:
    """Narrowing and whole operations of any layout give the elements of the contiguous array."""
    base = np.random.default_rng(55).standard_normal((6, 8, 10))
    cut: dict[str, Callable[[Any], Any]] = {
        "C": lambda a: a,
        "F": np.asfortranarray,
        "every second": lambda a: a[:, ::2, 1::2],
        "backwards": lambda a: a[::-1, ::-1],
        "transposed": lambda a: a.transpose(1, 2, 0),
        "0-d": lambda a: a[1, 2, 3, ...],
        "empty": lambda a: a[3:3],
        "read-only": lambda a: np.broadcast_to(a, (2, *a.shape)),
    }
    values = cut[view](base)
    numbers = np.random.default_rng(56).random(values.shape)
    form = FORMATS["float16"]
    fast, slow = both(lambda: narrow(values, form, rounding, uniforms=numbers))
    assert alike(fast, slow)
    assert alike(fast, np.array(narrow(np.array(values, order="C"), form, rounding, uniforms=numbers)))
    mode: dict[str, Any] = {"stream": Stochastic(1, 1, 1)} if rounding == "stochastic" else {}
    state = cut[view](narrow(base, form))

    def sum_of(operand: Any) -> Any:
        if rounding == "stochastic":
            mode["stream"] = Stochastic(1, 1, 1)
        return Arithmetic(format=form, rounding=rounding, **mode).apply(np.multiply, (operand, 0.3))

    assert alike(*both(lambda: sum_of(state)))
    assert alike(np.array(sum_of(state)), np.array(sum_of(np.array(state, order="C"))))


@pytest.mark.parametrize("rounding", MODES)
@pytest.mark.parametrize("function", [*oracle.BASIC, "square", "reciprocal"])
def test_layouts_of_float64_do_not_matter(function: str, rounding: Any, both: Any) -> None:
    """Whole operations in float64 on strided, reversed, broadcast, Fortran and constant operands."""
    ufunc = getattr(np, function)
    left, right = np.random.default_rng(58).uniform(0.5, 2.0, (2, 6, 8))
    pairs = [
        (left, right), (left[::-1], right), (left[:, ::3], right[:, 1::3]), (left[::-1, ::-2], right[::-1, ::-2]),
        (np.asfortranarray(left), np.asfortranarray(right)), (left.T, right.T), (np.asfortranarray(left), right),
        (left, right[:1]), (left[:, :1], right[:1]), (left[0], 0.3), (0.3, left[0, ::-1]),
        (left[2, 3, ...], right[2, 3, ...]), (np.broadcast_to(left[0, 0], (8,)), right[0]), (left[3:3], right[3:3]),
    ]  # fmt: skip

    def computed(*given: Any) -> Any:
        stream = Stochastic(1, 1, 1) if rounding == "stochastic" else None
        return Arithmetic(format=FORMATS["float64"], rounding=rounding, stream=stream).apply(ufunc, given)

    for pair in pairs:
        operands = pair[: ufunc.nin]
        fast, slow = both(lambda operands=operands: computed(*operands))
        dense = [np.array(operand, order="C") for operand in np.broadcast_arrays(*operands)]
        assert alike(fast, slow)
        assert alike(np.ascontiguousarray(fast), np.ascontiguousarray(computed(*dense)))


def test_every_loop_compiles_and_is_used() -> None:
    """Each row of both tables has a compiled function, and one that is not in the table has none."""
    for name in (*LOOPS, *import_module("narrowgauge.arithmetic.onepass").PASSES):
        assert compiled.kernel(name) is not None
    with pytest.raises(KeyError):
        compiled.kernel("no such loop")
