"""The wrapped values decide, print, copy and iterate as the plain values that they stand for."""

from __future__ import annotations

import copy
import math
import numbers
from collections.abc import Hashable

import numpy as np
import pytest
from kernel_runs import module_of, owned

from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.exact import Exact
from narrowgauge.dispatch.scalar import Scalar
from narrowgauge.errors import RefusedError

VALUES = np.array([[0.375, -1.25, 2.5], [0.0625, 5.5, -0.875]])  # float16 has them all


@pytest.fixture
def x():
    return owned(VALUES, module_of("", "float16")[1])


def test_an_array_passes_for_an_ndarray_of_float64(x):
    """isinstance, dtype, shape and the rest answer as for the plain array."""
    assert isinstance(x, np.ndarray)
    assert not isinstance(x, (float, list, np.floating))
    assert x.dtype == np.float64
    assert (x.shape, x.ndim, x.size, len(x)) == ((2, 3), 2, 6, 2)
    assert x.flags.c_contiguous
    assert x.flags.f_contiguous is False
    assert not np.isscalar(x)
    assert np.issubdtype(x.dtype, np.floating)
    assert np.finfo(x.dtype).eps == np.finfo(np.float64).eps


def test_a_0d_value_passes_for_a_float(x):
    """isinstance with float, np.float64 and the abstract numbers answers as for NumPy's float64 scalar."""
    s = x[0, 0]
    assert isinstance(s, float)
    assert isinstance(s, np.float64)
    assert isinstance(s, np.generic)
    assert isinstance(s, numbers.Real)
    assert not isinstance(s, (int, np.ndarray))
    assert np.isscalar(s)
    assert (s.dtype, s.shape, s.ndim, s.size) == (np.float64, (), 0, 1)
    with pytest.raises(TypeError, match="has no len"):
        len(s)
    assert not np.iterable(s)
    with pytest.raises(TypeError, match="not iterable"):
        iter(s)
    with pytest.raises(TypeError, match="not iterable"):
        _ = 0.375 in s
    with pytest.raises(IndexError, match="invalid index to scalar variable"):
        s[0]
    with pytest.raises(TypeError, match="does not support item assignment"):
        s[0] = 1.0


@pytest.mark.parametrize("form", ["float64", "float16"])
def test_a_0d_value_is_indexed_as_numpys_scalar(form):
    """x[()] is the value, x[...] an array without axes, x[None] one of one value; a Python float is not indexed."""
    x = owned(VALUES, module_of("", form)[1])
    plain = VALUES[0, 0]
    for key in ((), ..., None, (..., None)):
        found = x[0, 0][key]
        assert type(found) is (Scalar if key == () else Array)
        assert found.shape == np.shape(plain[key])
        assert np.asarray(found._carrier).tolist() == plain[key].tolist()
    made = x[0, 0][...]
    made[()] = 7
    assert x[0, 0] == 0.375
    if form == "float64":
        with pytest.raises(TypeError, match="'float' object is not subscriptable"):
            x[0, 0].item()[()]


@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16"])
def test_integral_parts_and_questions_about_them(form):
    """math of a module that knows no state, int-like parts and is_integer give exact values as plain code has them."""
    x = owned(VALUES * 4, module_of("", form)[1])
    for value, plain in zip(x[0], VALUES[0] * 4, strict=True):
        for part in (math.floor, math.ceil, math.trunc):
            assert type(part(value)) is Exact
            assert part(value)._carrier == part(plain)
        assert type(value.is_integer()) is Exact
        assert bool(value.is_integer()) == plain.is_integer()
    with pytest.raises(ValueError, match="NaN"):
        math.floor(x[0, 0] * np.nan)
    assert x._setting.faults == []


def test_a_mask_passes_for_booleans(x):
    """isinstance and dtype answer as for a boolean array and for NumPy's boolean."""
    m = x > 0
    assert isinstance(m, np.ndarray)
    assert isinstance(m[0, 0], np.bool_)
    assert m.dtype == bool
    assert type(m) is type(m[0, 0]) is Exact


def test_equality_and_hash(x):
    """A 0-d value hashes as the number it holds and serves as a key; arrays are not hashable."""
    s, t = x[0, 0], x[0, 0]
    assert hash(s) == hash(0.375)
    assert {s: 1}[t] == 1
    assert {0.375: 2}[s] == 2
    assert s == 0.375
    assert s != 0.25
    assert s != "a"
    assert (s == None) is False  # noqa: E711  # the comparison is what is tested
    assert isinstance(s, Hashable)
    for value in (x, x > 0):
        with pytest.raises(TypeError, match=r"unhashable type: 'numpy\.ndarray'"):
            hash(value)


def test_truth_of_several_values_is_numpys_error(x):
    """`if` on an array of several values raises NumPy's ValueError in NumPy's words."""
    words = r"^The truth value of an array with more than one element is ambiguous\. Use a\.any\(\) or a\.all\(\)$"
    for value in (x, x > 0, VALUES):
        with pytest.raises(ValueError, match=words):
            bool(value)
    assert bool(x[:1, :1])
    assert bool(x[0, 0])
    assert not bool(x[0, 0] * 0)
    assert not bool((x > 9).any())


def test_copies_are_apart_and_of_the_same_run(x):
    """copy.copy and copy.deepcopy of arrays and masks share no memory; 0-d values are immutable and stay themselves."""
    for made in (copy.copy(x), copy.deepcopy(x), copy.deepcopy({"x": [x]})["x"][0], x.copy()):
        made[0, 0] = 7
        assert type(made) is Array
        assert made._setting is x._setting
    assert x[0, 0] == 0.375
    m = x > 0
    for made in (copy.copy(m), copy.deepcopy(m)):
        made[0, 0] = False
        assert type(made) is Exact
    assert m[0, 0]
    flag = m[0, 0]
    assert copy.deepcopy(flag) == flag
    s = x[0, 0]
    assert copy.copy(s) is copy.deepcopy(s) is s.copy() is s


def test_a_0d_value_does_not_change_under_its_other_names(x):
    """`x += dx` makes a new value, as with a float; a list that holds the old one keeps it."""
    s = x[0, 0]
    path = [s]
    s += 1
    path.append(s)
    assert path == [0.375, 1.375]


def test_printing(x):
    """Text of a value is the number, its repr also names the format; a format specification is the number's."""
    s = x[0, 0]
    assert str(s) == f"{s}" == "0.375"
    assert f"{s:8.2f}|{s:e}" == "    0.38|3.750000e-01"
    assert repr(s) == "0.375 in float16"
    assert repr(x[0]) == "array([ 0.375, -1.25 ,  2.5  ], dtype=float32) in float16"
    assert str(x[0]) == f"{x[0]}" == "[ 0.375 -1.25   2.5  ]"
    with pytest.raises(TypeError, match="unsupported format string"):
        f"{x:.2f}"
    m = x[0] > 0
    assert str(m) == f"{m}" == "[ True False  True]"
    assert repr(m) == "array([ True, False,  True])"
    assert f"{m[0]}" == "True"


@pytest.mark.parametrize("name", ["sum", "mean", "std", "dot", "cumsum", "tolist", "max", "clip", "reshape", "item"])
def test_probing_for_a_method_is_no_fault(x, name):
    """hasattr says that an array has what an ndarray has, and only a call of what is not offered is recorded."""
    assert hasattr(x, name)
    assert callable(getattr(x, name))
    assert x._setting.faults == []


@pytest.mark.parametrize("name", ["values", "iloc", "toarray", "to_numpy", "_private", "append", "__array_priority__"])
def test_probing_for_what_ndarray_lacks_is_no_fault(x, name):
    """hasattr is False for what is foreign to NumPy, and for the protocols by which memory would leave."""
    for value in (x, x[0, 0], x > 0):
        assert not hasattr(value, name)
        assert getattr(value, name, 3) == 3
    with pytest.raises(AttributeError, match=f"^'ndarray' object has no attribute '{name}'$"):
        getattr(x, name)
    assert x._setting.faults == []


@pytest.mark.parametrize("name", ["__array_interface__", "__array_struct__", "__dlpack__", "__complex__", "__buffer__"])
def test_memory_is_not_handed_out(x, name):
    """None of the protocols by which C code reads an array is there."""
    assert not hasattr(x, name)
    with pytest.raises(TypeError):
        memoryview(x)


@pytest.mark.parametrize("name", ["imag", "strides", "base", "ctypes", "itemsize", "nbytes"])
def test_a_property_that_is_not_offered_is_refused_at_once(x, name):
    """What cannot be called later is refused when it is read."""
    with pytest.raises(RefusedError, match=f"^.{name} is not offered by this version on a value of the state$"):
        getattr(x, name)
    assert len(x._setting.faults) == 1


def test_iteration_and_membership(x):
    """Rows are views, items 0-d values; unpacking, zip, reversed and `in` work as in NumPy."""
    rows = list(x)
    rows[1][0] = 9
    assert x[1, 0] == 9
    first, second, third = x[0]
    assert type(first) is Scalar
    assert [first, second, third] == [0.375, -1.25, 2.5]
    assert [a + b for a, b in zip(x[0], x[1], strict=True)] == [9.375, 4.25, 1.625]
    assert list(reversed(x[0])) == [2.5, -1.25, 0.375]
    assert 2.5 in x
    assert 2.75 not in x
    with pytest.raises(TypeError, match="iteration over a 0-d array"):
        iter(x.reshape(6)[:1].squeeze())


def test_numpys_errors_are_numpys(x):
    """Wrong shapes, wrong indices, writes to read-only views raise as in plain code, and are no faults of the run."""
    with pytest.raises(ValueError, match="could not be broadcast together"):
        x + x[:, :2]
    with pytest.raises(IndexError, match="out of bounds"):
        x[7]
    with pytest.raises(ValueError, match="could not broadcast input array"):
        x[0] = [1.0, 2.0]
    with pytest.raises(ValueError, match="read-only"):
        np.broadcast_to(x[0], (2, 3))[0, 0] = 1
    with pytest.raises(TypeError, match="unsupported operand"):
        x & 1
    with pytest.raises(TypeError):
        x + "a"
    with pytest.raises(ValueError, match="must be non-negative"):
        np.diff(x, -1)
    with pytest.raises(ValueError, match="need at least one array"):
        np.concatenate([])
    counts = np.zeros(3, int)
    with pytest.raises(TypeError, match="Cannot cast"):
        counts += x[0]
    assert x._setting.faults == []


def test_views_share_memory_in_a_narrow_format(x):
    """A store through any view rounds into the one carrier that all views see."""
    turned, flat, part = x.T, x.reshape(6), x[:, 1:]
    part[0, 0] = 0.1
    turned[0, 1] += 0.2
    assert float(x._carrier[0, 1]) == float(np.float16(0.1))
    assert float(flat._carrier[3]) == float(np.float16(0.0625 + float(np.float16(0.2))))
    assert np.shares_memory(turned._carrier, flat._carrier)
