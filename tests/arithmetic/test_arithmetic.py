"""The Arithmetic: what it refuses, constants, targets and in-place calls, casts, and what counts as held."""

from __future__ import annotations

import operator
from fractions import Fraction
from math import copysign, inf, isnan, nan
from typing import Any

import ml_dtypes
import mpfr_oracle as oracle
import numpy as np
import numpy.typing as npt
import pytest

from narrowgauge.arithmetic.arithmetic import Arithmetic, arithmetic_named
from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.stochastic import Stochastic

Carrier = npt.NDArray[np.floating[Any]]


def carriers(name: str, *rows: list[float]) -> list[Carrier]:
    """Return lists of numbers rounded to a format, as carrier arrays."""
    return [arithmetic_named(name).cast(np.array(row)) for row in rows]


def test_random_numbers_go_with_stochastic_rounding_alone() -> None:
    """A stream without stochastic rounding, or the reverse, is a mistake of the caller and named."""
    message = "stochastic rounding, and it alone, takes a stream; accepted: Stochastic(seed, level, block)"
    with pytest.raises(ValueError, match="stochastic") as caught:
        Arithmetic(format=FORMATS["float16"], rounding="stochastic")
    assert str(caught.value) == message
    with pytest.raises(ValueError, match="stochastic"):
        Arithmetic(format=FORMATS["float16"], rounding="up", stream=Stochastic(1, 2, 3))


def test_only_the_plain_arithmetic_of_a_native_format_is_native() -> None:
    """NumPy may compute as it likes in float32 and float64 to nearest, subnormals kept, nothing fused."""
    for name in oracle.ALL:
        form = FORMATS[name]
        assert Arithmetic(format=form).native == (name in ("float32", "float64"))
        assert not Arithmetic(format=form, rounding="up").native
        assert not Arithmetic(format=form, subnormals="flushed").native
        assert not Arithmetic(format=form, fused=True).native


def test_the_named_arithmetic_is_the_plain_one() -> None:
    """To nearest, subnormals kept, nothing fused; two of one name are equal and one key, whatever they have met."""
    for name in oracle.NAMES:
        one, other = arithmetic_named(name), arithmetic_named(name)
        one.constant(0.1)
        assert (one.format, one.rounding, one.subnormals, one.fused) == (FORMATS[name], "nearest", "kept", False)
        assert one == other
        assert hash(one) == hash(other)


def test_an_unlisted_ufunc_is_a_key_error() -> None:
    """Nothing is computed by a way that the table does not state."""
    with pytest.raises(KeyError):
        arithmetic_named("float16").apply(np.nextafter, carriers("float16", [1.0], [2.0]))


# Constants ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "number", [0.1, 1, 3, -7, 2049, 2**70 + 2**62 + 1, 1e-7, 1e300, -inf, np.float32(0.1), np.int64(257), np.uint8(3)]
)
@pytest.mark.parametrize("name", ["float16", "bfloat16", "float32"])
def test_constants_are_rounded_once_and_stay_weak(name: str, number: Any) -> None:
    """A weak scalar of any kind becomes a Python float, the one nearest value of the format."""
    exact = int(number) if isinstance(number, (int, np.integer)) else float(number)
    want = exact if exact in (inf, -inf) else oracle.exactly(Fraction(exact), name)
    arithmetic = arithmetic_named(name)
    for _ in range(2):  # the second answer comes from the cache
        found = arithmetic.constant(number)
        assert type(found) is float
        assert found == want


@pytest.mark.parametrize("name", ["float16", "bfloat16", "float32"])
def test_the_cache_does_not_confuse_zeros(name: str) -> None:
    """0.0 and -0.0 are one dictionary key and yet come back with their own signs, in any order, of any type."""
    arithmetic = arithmetic_named(name)
    for zero in (0.0, -0.0, 0, False, np.float64(-0.0), np.float64(0.0), np.float32(-0.0), -0.0, 0.0):
        found = arithmetic.constant(zero)
        assert (found, copysign(1.0, found)) == (0.0, copysign(1.0, float(zero)))


@pytest.mark.parametrize("name", oracle.NAMES)
def test_the_cache_does_not_confuse_types(name: str) -> None:
    """True, 1 and 1.0 are one dictionary key; 2^53 + 1 and its float are not one number; NaN is found as NaN."""
    arithmetic = arithmetic_named(name)
    for one in (True, 1, 1.0, np.bool_(True), np.int8(1), np.float32(1)):
        found = arithmetic.constant(one)
        assert found == 1
        assert type(found) is (type(one) if name == "float64" else float)
    assert isnan(arithmetic.constant(nan))
    assert isnan(arithmetic.constant(nan))


def test_integers_and_their_floats_are_different_constants() -> None:
    """2^70 + 2^62 + 1 rounds up in bfloat16, its float64 down, whichever is asked for first."""
    number = 2**70 + 2**62 + 1
    for order in ((number, float(number)), (float(number), number)):
        arithmetic = arithmetic_named("bfloat16")
        found = {type(asked): arithmetic.constant(asked) for asked in order}
        assert found == {int: 2.0**70 + 2.0**63, float: 2.0**70}


def test_float64_leaves_constants_as_they_are() -> None:
    """The very object comes back, so that plain code's shortcuts for exact integers are taken."""
    arithmetic = arithmetic_named("float64")
    for number in (2, 0.1, True, np.float32(0.1), 2**80, -0.0):
        assert arithmetic.constant(number) is number


def test_the_cache_is_bounded() -> None:
    """A kernel that feeds a new constant each step gets right answers and does not fill memory."""
    arithmetic = arithmetic_named("float16")
    for number in range(5000):
        assert arithmetic.constant(number + 0.25) == np.float16(number + 0.25)
    assert len(arithmetic._constants) == 4096


def test_constants_meet_carriers_without_widening_them() -> None:
    """float32 carrier and constant give a float32 carrier: the constant is a Python float, weak to NumPy."""
    for name in oracle.SIXTEEN_BITS:
        arithmetic = arithmetic_named(name)
        (state,) = carriers(name, [1.0, 3.0])
        found = arithmetic.apply(np.multiply, (arithmetic.constant(0.1), state))
        assert found.dtype == np.float32
        tenth = oracle.exactly(Fraction(0.1), name)
        want = [oracle.exactly(Fraction(tenth) * k, name) for k in (1, 3)]
        assert found.tolist() == want


# apply: targets, calls, shapes ----------------------------------------------------------------------------------

ONE_OF_EACH_WAY = [np.add, np.multiply, np.sqrt, np.maximum, np.floor, np.exp, np.tanh, np.power, np.arctan2, np.hypot]


def named(ufunc: np.ufunc) -> str:
    """Return a ufunc's name, for the names of the tests."""
    return str(ufunc.__name__)


@pytest.mark.parametrize("ufunc", ONE_OF_EACH_WAY, ids=named)
@pytest.mark.parametrize("name", oracle.NAMES)
def test_a_target_receives_the_result(name: str, ufunc: np.ufunc) -> None:
    """With `out` the same bits arrive in that array, which is returned; also in a strided view of a larger one.

    In float32 and float64 they are those of NumPy with such a target: its own functions of these types may give
    other bits for other strides, arctan2 of float32 does on some processors.
    """
    arithmetic = arithmetic_named(name)
    operands = carriers(name, [0.3, 1.7, 2.5, 1e-5], [1.1, 0.9, 3.0, 2.0])[: ufunc.nin]
    base, twin = np.full((2, 4, 3), 7.0, arithmetic.format.carrier)
    target = base[::-1, 1]
    found = arithmetic.apply(ufunc, operands, out=target)
    assert found is target
    plain = arithmetic.format.native
    want = ufunc(*operands, out=twin[::-1, 1]) if plain else arithmetic.apply(ufunc, operands)
    assert np.array_equal(target, want)
    assert (base[:, ::2] == 7.0).all()


@pytest.mark.parametrize("ufunc", ONE_OF_EACH_WAY, ids=named)
@pytest.mark.parametrize("name", oracle.NAMES)
def test_an_operand_may_be_the_target(name: str, ufunc: np.ufunc) -> None:
    """The result may overwrite its own first operand, as an in-place operator does."""
    arithmetic = arithmetic_named(name)
    operands = carriers(name, [0.3, 1.7, 2.5, 1e-5], [1.1, 0.9, 3.0, 2.0])[: ufunc.nin]
    twins = [operand.copy() for operand in operands]
    want = ufunc(*twins, out=twins[0]) if arithmetic.format.native else arithmetic.apply(ufunc, twins)
    assert arithmetic.apply(ufunc, operands, out=operands[0]) is operands[0]
    assert np.array_equal(operands[0], want)


@pytest.mark.parametrize("name", oracle.NAMES)
def test_an_in_place_call_changes_its_first_operand(name: str) -> None:
    """`call` replaces the ufunc where the carrier computes: `+=` rounds in the array itself, shared views follow."""
    arithmetic = arithmetic_named(name)
    state, step = carriers(name, [1.0, 2.0, 2047.0], [0.1, 1e-4, 1.5])
    view = state[1:]
    want = arithmetic.apply(np.add, (state, step))
    assert arithmetic.apply(np.add, (state, step), call=operator.iadd) is state
    assert np.array_equal(state, want)
    assert np.array_equal(view, want[1:])


def test_float64_makes_plain_codes_own_call() -> None:
    """`x ** 2` on float64 is the operator's squaring, not np.power's, and is counted to have been called."""
    calls = []

    def power(left: Any, right: Any) -> Any:
        calls.append(right)
        return left**right

    values = np.random.default_rng(14).standard_normal(1000)
    found = arithmetic_named("float64").apply(np.power, (values, 2), call=power)
    assert calls == [2]
    assert np.array_equal(found, values * values)


@pytest.mark.parametrize("ufunc", [ufunc for ufunc in WAYS if ufunc.nin == 1], ids=named)
@pytest.mark.parametrize("name", oracle.NAMES)
def test_scalars_arrays_without_axes_and_arrays_agree(name: str, ufunc: np.ufunc) -> None:
    """A scalar gives a scalar of the carrier's type (or a boolean), in 16-bit formats with the array's bits.

    In float32 and float64 NumPy may compute arrays otherwise than scalars: there the bits are NumPy's for a scalar.
    """
    arithmetic = arithmetic_named(name)
    with np.errstate(all="ignore"):
        for number in (0.4, 1e-6, -3.0):
            (array,) = carriers(name, [number])
            want = ufunc(array[0]) if arithmetic.format.native else arithmetic.apply(ufunc, (array,))[0]
            for operand in (array[0], array.reshape(())):
                scalar = arithmetic.apply(ufunc, (operand,))
                assert isinstance(scalar, np.generic)
                assert scalar.dtype == (bool if WAYS[ufunc] == "truth" else arithmetic.format.carrier)
                assert np.array_equal(scalar, want, equal_nan=True)


@pytest.mark.parametrize("ufunc", [np.add, np.power, np.maximum, np.less], ids=named)
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_operands_are_broadcast(name: str, ufunc: np.ufunc) -> None:
    """A column, a row and a scalar meet as in NumPy, element by element the same bits."""
    arithmetic = arithmetic_named(name)
    column, row = carriers(name, [0.3, 1.7, 2.5], [1.1, 0.9])
    found = arithmetic.apply(ufunc, (column[:, None], row))
    assert found.shape == (3, 2)
    for i, j in np.ndindex(3, 2):
        assert found[i, j] == arithmetic.apply(ufunc, (column[i], row[j]))
    assert np.array_equal(arithmetic.apply(ufunc, (column, row[0])), found[:, 0])


@pytest.mark.parametrize("name", oracle.NAMES)
def test_empty_operands_give_empty_results(name: str) -> None:
    """No path, no value, no error, by every way."""
    arithmetic = arithmetic_named(name)
    empty = np.empty((0, 3), arithmetic.format.carrier)
    for ufunc in WAYS:
        assert arithmetic.apply(ufunc, (empty,) * ufunc.nin).shape == (0, 3)


def test_what_a_python_function_widened_is_rounded_again() -> None:
    """In float32 a call that returns a Python float or float64 comes back as the nearest float32."""
    arithmetic = arithmetic_named("float32")
    (state,) = carriers("float32", [2.0])
    for call in (lambda x: float(x[0]) / 3, lambda x: np.float64(x[0]) / 3, lambda x: x.astype(np.float64) / 3):
        found = arithmetic.apply(np.divide, (state,), call=call)
        assert found.dtype == np.float32
        assert np.ravel(found)[0] == np.float32(2) / np.float32(3)


# cast and holds -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", oracle.NAMES)
def test_every_real_type_is_cast(name: str) -> None:
    """Booleans, integers to 2^53 and floats to 64 bits arrive as a new array of the carrier's type, rounded once."""
    arithmetic = arithmetic_named(name)
    for dtype in "? b B h H i I l L q Q e f d".split():  # noqa: SIM905 NumPy's own letters
        values = np.array([0, 1, 100], dtype)
        found = arithmetic.cast(values)
        assert found.dtype == arithmetic.format.carrier
        assert not np.shares_memory(found, values)
        assert found.tolist() == values.astype(float).tolist()
    many = np.array([2**53, -(2**53), 2**53 - 1, 2049, 257], np.int64)
    want = [oracle.exactly(Fraction(number), name) for number in many.tolist()]
    assert arithmetic.cast(many).tolist() == want


@pytest.mark.parametrize("name", oracle.NAMES)
@pytest.mark.parametrize("number", [2**53 + 1, -(2**53) - 1, 2**64 - 1, -(2**63)])
def test_integers_that_float64_cannot_hold_are_refused(name: str, number: int) -> None:
    """They would be rounded twice: the message says up to where they are taken."""
    with pytest.raises(ValueError, match="2") as caught:
        arithmetic_named(name).cast(np.array([0, number], np.uint64 if number > 2**63 else np.int64))
    assert str(caught.value) == "integers beyond 2**53 cannot be rounded once; accepted: up to 2**53"


@pytest.mark.parametrize("dtype", [np.complex128, np.longdouble, "U3", object, "M8[s]", ml_dtypes.bfloat16])
def test_types_that_are_not_real_to_64_bits_are_refused(dtype: Any) -> None:
    """Complex and long numbers, text, objects, dates: the message names the type and what is taken."""
    values = np.zeros(2, dtype)
    with pytest.raises(ValueError, match="cannot be rounded") as caught:
        arithmetic_named("float16").cast(values)
    assert str(caught.value) == (
        f"dtype {values.dtype} cannot be rounded; accepted: booleans, integers, floats to 64 bits"
    )


@pytest.mark.parametrize("name", oracle.NAMES)
def test_values_of_the_format_are_held_and_no_others(name: str) -> None:
    """Every edge value is held, NaN and infinities too; one number half a unit away is not."""
    arithmetic = arithmetic_named(name)
    edges = oracle.edge_values(name)
    assert arithmetic.holds(edges)
    assert arithmetic.holds(np.array(edges[:10], arithmetic.format.carrier))
    assert arithmetic.holds(np.array([1, 2, 3]))
    assert arithmetic.holds(np.array([True]))
    assert arithmetic.holds(np.array(0.5))
    assert arithmetic.holds(np.empty(0))
    if name != "float64":
        for beside in (1 + arithmetic.format.unit_roundoff, arithmetic.format.min_subnormal / 2, 1e300):
            assert not arithmetic.holds(np.append(edges, beside))
            assert not arithmetic.holds(np.array(beside))


def test_integers_that_float64_does_not_have_are_not_held():
    """2^53 + 1 would become 2^53 on the way: the format does not hold it, while 2^53 is held by float64."""
    assert not arithmetic_named("float64").holds(np.array([2**53 + 1]))
    assert arithmetic_named("float64").holds(np.array([2**53]))
    assert not arithmetic_named("float16").holds(np.array([4097]))
