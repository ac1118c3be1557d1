"""The tables are total: every row is exercised, classified a second time here, and every argument is accounted for."""

from __future__ import annotations

import importlib
import inspect

import ml_dtypes
import numpy as np
import pytest
from classification import EXACT, NOT_OF_THE_STATE, REFUSED, ROUNDED, ROUTE_OF
from kernel_runs import NARROW, module_of, owned, same, unheld
from numpy.testing.overrides import get_overridable_numpy_array_functions, get_overridable_numpy_ufuncs
from numpy_calls import CALLS, METHODS, UFUNC_CALLS
from test_dispatch_observer import Log

from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.dispatch import functions, ufuncs
from narrowgauge.dispatch.functions import row_for
from narrowgauge.dispatch.routes import INTEGERS, NEITHER, OTHERS, ROUTES, route_of
from narrowgauge.dispatch.setting import Wrapped
from narrowgauge.dispatch.tables import ROWS
from narrowgauge.errors import RefusedError

for _module in ("fft", "strings", "char", "rec", "ma", "polynomial", "linalg", "lib.recfunctions"):
    importlib.import_module(f"numpy.{_module}")  # what they add to NumPy's own list is there once they are imported
NEWEST = tuple(map(int, np.__version__.split(".")[:2])) == (2, 4)
FUNCTIONS = get_overridable_numpy_array_functions()
UFUNCS = get_overridable_numpy_ufuncs()
VALUES = np.array([[0.37, -1.21, 2.63], [0.049, 5.9, -0.87]])
MATRIX = np.array([[2.1, 0.3, 0.2], [0.3, 1.7, -0.4], [0.2, -0.4, 1.3]])


def name_of(function):
    return f"{function.__module__}.{function.__name__}"


def operands(ufunc, setting, kind=None):
    """Two arrays of the format inside every function's domain, or as a plain type's."""
    low, high = (1.1, 3.0) if ufunc is np.arccosh else (0.05, 0.95)
    rng = np.random.Generator(np.random.PCG64DXSM([5, ufunc.nin]))
    pair = [np.round(rng.uniform(low, high, (4, 50)), 3) for _ in range(ufunc.nin)]
    return [owned(array, setting) if kind is None else array.astype(kind).astype(np.float64) for array in pair]


def run(call, form, observer=None):
    """What an expression gives, and what its arguments are afterwards."""
    text = f"""
        import numpy as np
        def kernel(x, q, o):
            v, w, u = x[0], abs(x[1]), o[0]
            m, s, k = x > 0, x[0, 0], (abs(x[1]) * 2).astype(int)
            c = np.linspace(0.1, 0.9, 3)
            return {call}, x, q, o
    """
    module, setting = module_of(text, form, observer)
    with np.errstate(all="ignore"):
        return module.kernel(*(owned(array, setting) for array in (VALUES, MATRIX, np.zeros((2, 3))))), setting


def check(call):
    """float64 gives NumPy's own result, narrower formats values of the format, and nothing is a fault."""
    plain, _ = run(call, None)
    ours, setting = run(call, "float64")
    if "empty_like" in call:
        plain[0][...] = np.nan  # what has not been written must be noticed when it is read
    assert same(plain, ours), call
    assert setting.faults == []
    for form in NARROW:
        result, setting = run(call, form)
        assert unheld(result, setting) == [], call
        assert setting.faults == []


def test_the_classification_is_stated_twice():
    """Every function and ufunc has the same route here and in the tables; the arithmetic computes the elementary."""
    stated = {getattr(np, name): "exact" for name in EXACT.split()}
    stated |= {getattr(np, name): "rounded" for name in ROUNDED.split()}
    assert stated == ROUTES
    assert ROUTES.keys() == WAYS.keys()
    assert {name.removeprefix("numpy."): row.route for name, row in ROWS.items()} == ROUTE_OF


@pytest.mark.skipif(not NEWEST, reason="the tables are those of the newest NumPy that is supported")
def test_every_function_and_ufunc_of_numpy_is_in_exactly_one_row():
    """The rows are NumPy's own lists of what an array can override: nothing twice, nothing missing, nothing else."""
    assert {name_of(function) for function in FUNCTIONS} == ROWS.keys()
    names = [ufunc.__name__ for ufunc in ROUTES] + [*OTHERS, *INTEGERS, *NEITHER]
    assert len(names) == len(set(names))
    assert set(names) == {ufunc.__name__ for ufunc in UFUNCS}
    assert len(ROWS) == len({name_of(function) for function in FUNCTIONS})


def test_an_older_numpy_has_nothing_that_is_in_no_row():
    """Every version that is supported is covered."""
    assert {name_of(function) for function in FUNCTIONS} <= ROWS.keys()
    assert {ufunc.__name__ for ufunc in UFUNCS} <= {
        u.__name__ for u in ROUTES
    } | OTHERS.keys() | INTEGERS | NEITHER.keys()


def test_every_row_is_exercised():
    """A row that is added has to be added to the calls; the refused ones are called by another test."""
    assert CALLS.keys() == {name for name, row in ROWS.items() if row.route != "refused"}
    assert UFUNC_CALLS.keys() == OTHERS.keys() | INTEGERS
    assert set(REFUSED) == {name.removeprefix("numpy.") for name, row in ROWS.items() if row.route == "refused"}


@pytest.mark.parametrize("name", CALLS)
def test_every_function_agrees_with_numpy_and_stays_in_the_format(name):
    """float64 gives NumPy's own result; narrower formats give values of the format; nothing is a fault."""
    for call in CALLS[name]:
        check(call)


@pytest.mark.parametrize("name", UFUNC_CALLS)
def test_every_other_ufunc_agrees_with_numpy_and_stays_in_the_format(name):
    """As the functions, for those that are no elementary operation; a NumPy that lacks one has no test of it."""
    if not hasattr(np, name):
        pytest.skip(f"this NumPy has no {name}")
    for call in UFUNC_CALLS[name]:
        check(call)


@pytest.mark.parametrize("call", METHODS)
def test_methods_and_keywords_agree_with_numpy_and_stay_in_the_format(call):
    """As the functions, for the methods of arrays and 0-d values and the methods and keywords of ufuncs."""
    check(call)


@pytest.mark.parametrize("function", sorted(FUNCTIONS, key=name_of), ids=name_of)
def test_every_argument_is_handled_or_refused_by_name(function):
    """The row names what NumPy's signature names, in its order; what is refused is refused in the stated words."""
    row = row_for(function)
    x = owned(VALUES, module_of("", "float16")[1])
    if row.route == "refused":
        with pytest.raises(RefusedError, match=" is refused: "):
            functions.call_function(x._setting, function, (x,), {})
        return
    try:
        parameters = inspect.signature(function).parameters.values()
    except ValueError:  # a NumPy whose own code does not tell
        parameters = None
    if parameters is not None and NEWEST:
        named = {one.name for one in parameters if one.kind is not one.VAR_KEYWORD}
        assert named <= {*row.placed, *row.named, row.variadic}
        if not any(one.kind is one.VAR_KEYWORD for one in parameters):
            assert {*row.placed, *row.named, row.variadic} - {None} == named
        assert row.placed == tuple(one.name for one in parameters if one.kind in (0, 1))
    for name in row.refused | {"an_argument_of_the_future"}:
        setting = x._setting
        setting.faults.clear()
        with pytest.raises(RefusedError, match=f"^{name}= of {row.shown} is not offered by this version$"):
            functions.call_function(setting, function, (np.arange(3),), {name: 1})
        assert len(setting.faults) == 1


@pytest.mark.parametrize("name", NOT_OF_THE_STATE.split())
def test_a_ufunc_of_dates_or_text_is_refused_with_its_reason(name):
    """One call each; no integer ufunc computes on numbers of the state, in NumPy's own words."""
    (ufunc,) = (ufunc for ufunc in UFUNCS if ufunc.__name__ == name)
    x = owned(VALUES, module_of("", "float16")[1])
    with pytest.raises(RefusedError, match=f"^np.{name} is refused: "):
        ufuncs.call_ufunc(x._setting, ufunc, "__call__", (x,), {})
    assert route_of(ufunc) == "refused"
    with pytest.raises(TypeError, match="not supported for the input types"):
        np.bitwise_and(x, 1)


@pytest.mark.parametrize("name", ["numpy.sinc", "numpy.linalg.inv", "numpy.concatenate", "numpy.percentile"])
def test_what_a_newer_numpy_adds_is_computed_whole_and_said_so(name, monkeypatch):
    """A function that stands in no row is computed in float64, rounded once, and told the observer as `whole`."""
    monkeypatch.delitem(ROWS, name)
    plain, _ = run(CALLS[name][0], None)
    ours, _ = run(CALLS[name][0], "float64")
    assert same(plain, ours)
    for form in NARROW:
        log = Log()
        result, setting = run(CALLS[name][0], form, log)
        assert unheld(result, setting) == []
        assert log.operations[-1] == (f"{name.removeprefix('numpy.')} (not known to this version)", "whole")


@pytest.mark.parametrize("ufunc", [np.cbrt, np.hypot])
def test_a_ufunc_that_a_newer_numpy_adds_is_computed_whole_and_said_so(ufunc, monkeypatch):
    """As a function that stands in no row."""
    monkeypatch.delitem(ROUTES, ufunc)
    log = Log()
    _, setting = module_of("", "float16", log)
    x = owned(np.abs(VALUES), setting)
    result = ufunc(*[x] * ufunc.nin)
    expected = ufunc(*[np.abs(VALUES).astype(np.float16).astype(np.float64)] * ufunc.nin).astype(np.float16)
    assert np.array_equal(result._carrier, expected)
    assert log.operations == [(f"{ufunc.__name__} (not known to this version)", "whole")]
    assert route_of(ufunc) == "whole"


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


def test_where_leaves_the_other_places_untouched():
    """In a 16-bit format too: with out= they keep what they had, without it they are NaN, which nothing hides."""
    result, setting = run("np.add(x, 0.3, out=np.full((2, 3), 7.0), where=m), np.sqrt(abs(x), where=m)", "float16")
    kept, blank = result[:2]
    chosen = VALUES > 0
    assert (kept._carrier[~chosen] == 7).all()
    assert np.array_equal(kept._carrier[chosen], (VALUES.astype(np.float16) + np.float16(0.3))[chosen])
    assert np.array_equal(np.isnan(blank._carrier), ~chosen)
    assert unheld([kept, blank], setting) == []
