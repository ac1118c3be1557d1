"""The tables are total: every row is exercised, classified a second time here, and every argument is accounted for."""

from __future__ import annotations

import inspect

import ml_dtypes
import numpy as np
import pytest
from kernel_runs import NARROW, module_of, owned, same, unheld

from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.dispatch.functions import FUNCTIONS, JOINED, MOVED
from narrowgauge.dispatch.routes import ROUTES
from narrowgauge.dispatch.setting import Wrapped
from narrowgauge.errors import RefusedError

# A second statement of the classification, independent of the table that the arithmetic computes by.
EXACT = (
    "absolute ceil copysign equal fabs floor fmax fmin fmod greater greater_equal isfinite isinf isnan less less_equal "
    "logical_and logical_not logical_or logical_xor maximum minimum negative not_equal positive rint sign signbit trunc"
)
ROUNDED = (
    "add arccos arccosh arcsin arcsinh arctan arctan2 arctanh cbrt cos cosh deg2rad degrees divide exp exp2 expm1 "
    "float_power floor_divide heaviside hypot log log10 log1p log2 logaddexp logaddexp2 multiply power rad2deg radians "
    "reciprocal remainder sin sinh sqrt square subtract tan tanh"
)

# One call, or more, of every function: arguments after the state, keywords. `x` is the state, shape (2, 3).
STATE = object()
CALLS = {
    np.all: [((STATE,), {}), ((STATE, 0), {"keepdims": True})],
    np.amax: [((STATE,), {"axis": 1})],
    np.amin: [((STATE,), {})],
    np.any: [((STATE,), {"axis": 1, "keepdims": True})],
    np.array_split: [((STATE, 2, 1), {})],
    np.atleast_1d: [((STATE,), {})],
    np.atleast_2d: [((STATE,), {})],
    np.broadcast_to: [((STATE, (4, 2, 3)), {"subok": False})],
    np.clip: [((STATE, 0.1, 0.7), {}), ((STATE,), {"min": 0.3}), ((STATE,), {"a_min": None, "a_max": 0.1})],
    np.column_stack: [(([STATE, STATE],), {})],
    np.concatenate: [(([STATE, STATE], 1), {}), (([[[0.1, 0.2, 0.3]], STATE],), {"axis": 0})],
    np.copy: [((STATE,), {"order": "F", "subok": True})],
    np.count_nonzero: [((STATE, 0), {"keepdims": True})],
    np.diff: [((STATE,), {}), ((STATE, 2), {"axis": 1})],
    np.empty_like: [((STATE, float, "F"), {"subok": True, "shape": 4})],
    np.expand_dims: [((STATE, 1), {})],
    np.flatnonzero: [((STATE,), {})],
    np.flip: [((STATE, 0), {})],
    np.full_like: [((STATE, 0.1), {}), ((STATE,), {"fill_value": 0.3, "shape": (2,)}), ((STATE, 0.1, int), {})],
    np.hstack: [(([STATE, STATE],), {})],
    np.max: [((STATE,), {"axis": 0, "out": None})],
    np.min: [((STATE, 1), {"keepdims": True})],
    np.moveaxis: [((STATE, 0, 1), {})],
    np.ndim: [((STATE,), {})],
    np.nonzero: [((STATE,), {})],
    np.ones_like: [((STATE,), {"order": "K"})],
    np.ravel: [((STATE, "F"), {})],
    np.real: [((STATE,), {})],
    np.repeat: [((STATE, 2, 1), {})],
    np.reshape: [((STATE, (3, 2)), {"order": "F", "copy": True})],
    np.roll: [((STATE, 1), {"axis": 1})],
    np.shape: [((STATE,), {})],
    np.size: [((STATE, 1), {})],
    np.split: [((STATE, 3, 1), {})],
    np.squeeze: [((STATE,), {"axis": None})],
    np.stack: [(([STATE, STATE],), {"axis": -1})],
    np.swapaxes: [((STATE, 0, 1), {})],
    np.take: [((STATE, [0, 5]), {"mode": "wrap"}), ((STATE, 1, 1), {})],
    np.tile: [((STATE, (2, 1)), {})],
    np.transpose: [((STATE, (1, 0)), {})],
    np.vstack: [(([STATE, STATE],), {})],
    np.where: [((STATE, STATE, 0.1), {}), (([[True], [False]], 0.3, STATE), {}), ((STATE,), {})],
    np.zeros_like: [((STATE,), {"dtype": np.float64, "shape": (2,)}), ((STATE, bool), {})],
}  # fmt: skip

# What NumPy's signature has and the row refuses by name.
REFUSED = {
    np.all: "out where", np.any: "out where", np.amax: "out initial where", np.amin: "out initial where",
    np.max: "out initial where", np.min: "out initial where", np.take: "out", np.concatenate: "out dtype casting",
    np.stack: "out dtype casting", np.hstack: "dtype casting", np.vstack: "dtype casting",
}  # fmt: skip

VALUES = np.array([[0.37, -1.21, 2.63], [0.049, 5.9, -0.87]])


def put(value, x):
    if isinstance(value, list):
        return [put(item, x) for item in value]
    return x if value is STATE else value


def operands(ufunc, setting, kind=None):
    """Two arrays of the format inside every function's domain, or as a plain type's."""
    low, high = (1.1, 3.0) if ufunc is np.arccosh else (0.05, 0.95)
    rng = np.random.Generator(np.random.PCG64DXSM([5, ufunc.nin]))
    pair = [np.round(rng.uniform(low, high, (4, 50)), 3) for _ in range(ufunc.nin)]
    return [owned(array, setting) if kind is None else array.astype(kind).astype(np.float64) for array in pair]


def test_the_classification_is_stated_twice():
    """`exact` and `rounded` name the same ufuncs here and in the table, which covers what the arithmetic computes."""
    stated = {getattr(np, name): "exact" for name in EXACT.split()}
    stated |= {getattr(np, name): "rounded" for name in ROUNDED.split()}
    assert stated == ROUTES
    assert ROUTES.keys() == WAYS.keys()


@pytest.mark.parametrize("form", NARROW)
@pytest.mark.parametrize("ufunc", ROUTES, ids=lambda ufunc: ufunc.__name__)
def test_every_ufunc_gives_values_of_the_format(ufunc, form):
    """Array, 0-d value, constants on either side and `out=`: wrapped, in the carrier, rounded, no fault."""
    _, setting = module_of("", form)
    with np.errstate(all="ignore"):
        first, *rest = operands(ufunc, setting)
        results = [
            ufunc(first, *rest),
            ufunc(first[0, 0], *(other[0, 0] for other in rest)),
            ufunc(first[:, :0], *rest and [0.3]),
        ]
        if rest:
            results += [
                ufunc(first, 0.3),
                ufunc(np.float64(0.3), first),
                ufunc(first, 1),
                ufunc(VALUES[:, :1, None], first),
            ]
        target = first.copy()
        results.append(ufunc(first, *rest, out=target))
    assert results[-1] is target
    assert all(isinstance(result, Wrapped) for result in results)
    assert unheld(results, setting) == []
    assert setting.faults == []


@pytest.mark.parametrize("form", ["float16", "bfloat16"])
@pytest.mark.parametrize("ufunc", ROUTES, ids=lambda ufunc: ufunc.__name__)
def test_every_ufunc_is_rounded_once(ufunc, form):
    """The result is float64's of the same operands, converted by NumPy or ml_dtypes: one rounding, no more."""
    kind = np.float16 if form == "float16" else ml_dtypes.bfloat16
    _, setting = module_of("", form)
    result = ufunc(*operands(ufunc, setting))._carrier
    exact = ufunc(*operands(ufunc, None, kind))
    expected = exact if exact.dtype == bool else exact.astype(kind).astype(np.float64)
    assert np.array_equal(result, expected)


def test_every_function_has_a_call_here():
    """A row that is added to the table has to be added to this test."""
    assert CALLS.keys() == FUNCTIONS.keys()


@pytest.mark.parametrize("function", FUNCTIONS, ids=lambda function: function.__name__)
def test_every_function_agrees_with_numpy_and_stays_in_the_format(function):
    """float64 gives NumPy's own result; narrower formats give values of the format; nothing is a fault."""
    for arguments, keywords in CALLS[function]:
        _, double = module_of("", "float64")
        plain = function(*(put(argument, VALUES) for argument in arguments), **keywords)
        ours = function(*(put(argument, owned(VALUES, double)) for argument in arguments), **keywords)
        if function is np.empty_like:
            plain[...] = np.nan  # what has not been written must be noticed when it is read
        assert same(plain, ours)
        for form in NARROW:
            _, setting = module_of("", form)
            x = owned(VALUES, setting)
            result = function(*(put(argument, x) for argument in arguments), **keywords)
            assert unheld(result, setting) == []
            assert setting.faults == []


@pytest.mark.parametrize("function", [*MOVED, *JOINED], ids=lambda function: function.__name__)
def test_every_argument_of_a_row_is_handled_or_refused(function):
    """What NumPy's signature names is what the row names, or a keyword that is refused by name."""
    parameters = list(inspect.signature(function).parameters)[1:]
    row = {**MOVED, **JOINED}[function].replace("|", " ").split()
    refused = REFUSED.get(function, "").split()
    assert not set(row) & set(refused)
    known = set(row) | set(refused)
    assert set(parameters) - {"newshape"} <= known  # an old name of reshape's `shape`
    _, setting = module_of("", "float16")
    first = owned(VALUES, setting)
    for name in refused:
        with pytest.raises(RefusedError, match=f"^{name}= of np.{function.__name__} is not offered by this version$"):
            function(
                [first] if function in JOINED else first, **({"indices": 0} if function is np.take else {}), **{name: 1}
            )
    assert len(setting.faults) == len(refused)
