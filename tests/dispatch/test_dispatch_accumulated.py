"""Sums and products have a stated order and accumulator: plain loops in NumPy's float16 and ml_dtypes' bfloat16 agree.

The loops below take one number after the other in types that have nothing to do with this project.
"""

from __future__ import annotations

import ml_dtypes
import numpy as np
import pytest
from kernel_runs import NARROW, call, module_of, owned, unheld
from test_dispatch_observer import Log

from narrowgauge.errors import DispatchError, RefusedError

TYPES = {"float16": np.float16, "bfloat16": ml_dtypes.bfloat16}


def total(values, kind):
    """One partial sum after the other."""
    found = values[0]
    for value in values[1:]:
        found = kind(found + value)
    return found


def product_sum(pairs, kind):
    return total([kind(one * other) for one, other in pairs], kind)


def draws(seed, *shape):
    return np.random.Generator(np.random.PCG64DXSM([31, seed])).standard_normal(shape)


def ours(expression, form, paths=None, observer=None, **arrays):
    """The carrier of an expression on arrays of the state."""
    text = f"import numpy as np\ndef kernel({', '.join(arrays)}):\n    return {expression}\n"
    module, setting = module_of(text, form, observer)
    setting.paths = paths
    with np.errstate(all="ignore"):
        result = module.kernel(*(owned(array, setting) for array in arrays.values()))
    assert setting.faults == []
    assert unheld(result, setting) == []
    return np.asarray(result._carrier, float)


@pytest.mark.parametrize("form", TYPES)
@pytest.mark.parametrize("rows", [1, 2, 50, 1000])
@pytest.mark.parametrize("columns", [1, 3, 100])
def test_sums_and_products_go_first_to_last(form, rows, columns):
    """sum, mean, cumsum, prod, np.add.reduce along the first axis, and the sum of all in C order, in either layout."""
    kind = TYPES[form]
    a = draws(rows, rows, columns)
    own = a.astype(kind)
    partial = [own[0]]
    for row in own[1:]:
        partial.append((partial[-1] + row).astype(kind))
    expected = np.array(partial).astype(float)
    for layout in "CF":
        x = np.array(a, order=layout)
        assert np.array_equal(ours("np.sum(x, axis=0)", form, x=x), expected[-1])
        assert np.array_equal(ours("x.sum(0)", form, x=x), expected[-1])
        assert np.array_equal(ours("np.add.reduce(x)", form, x=x), expected[-1])
        assert np.array_equal(ours("np.sum(x.T, axis=1)", form, x=x), expected[-1])
        assert np.array_equal(ours("np.cumsum(x, axis=0)", form, x=x), expected)
        mean = (partial[-1] / kind(rows)).astype(kind).astype(float)
        assert np.array_equal(ours("x.mean(axis=0)", form, x=x), mean)
    if columns == 3:
        assert ours("np.sum(x)", form, x=a) == float(total(own.ravel(), kind))
        products = own[0]
        for row in own[1:]:
            products = (products * row).astype(kind)
        assert np.array_equal(ours("np.prod(x, axis=0)", form, x=a), products.astype(float))


@pytest.mark.parametrize("form", TYPES)
def test_a_sum_in_the_carrier_would_be_found(form):
    """Negative control: float32 partial sums, rounded at the end, and the other direction give other values."""
    kind = TYPES[form]
    a = draws(1, 200, 20)
    got = ours("np.sum(x, axis=0)", form, x=a)
    own = a.astype(kind)
    late = own.astype(np.float32).sum(axis=0).astype(kind).astype(float)
    backwards = np.array([total(column[::-1], kind) for column in own.T]).astype(float)
    assert not np.array_equal(got, late)
    assert not np.array_equal(got, backwards)


@pytest.mark.parametrize("form", TYPES)
@pytest.mark.parametrize(("steps", "factors", "paths"), [(3, 4, 30), (2, 5, 7), (40, 30, 2)])
def test_contractions_sum_products_first_to_last(form, steps, factors, paths):
    """@, dot, inner, tensordot, einsum and vdot: each product and each partial sum is rounded."""
    kind = TYPES[form]
    a, b = draws(2, steps, factors), draws(3, factors, paths)
    one, other = a.astype(kind), b.astype(kind)
    expected = np.array(
        [[product_sum(zip(row, column, strict=True), kind) for column in other.T] for row in one]
    ).astype(float)
    for text in (
        "a @ b", "np.dot(a, b)", "a.dot(b)", "np.inner(a, b.T)", "np.tensordot(a, b, 1)", "np.matmul(a, b)",
        "np.einsum('ij,jk->ik', a, b)", "np.einsum('ij,jk', a, b)", "np.linalg.matmul(a, b)",
        "np.tensordot(a, b, axes=([1], [0]))", "np.stack([a, a])[1] @ b", "(np.stack([a, a]) @ b)[1]",
        "np.einsum('...ij,jk->...ik', np.stack([a, a]), b)[0]", "(b.T @ a.T).T",
    ):  # fmt: skip
        assert np.array_equal(ours(text, form, a=a, b=b), expected), text
    plain = ours("np.array(PLAIN) @ b".replace("PLAIN", repr(a.tolist())), form, a=a, b=b)
    assert np.array_equal(plain, expected)
    dot = float(product_sum(zip(one[0], other[:, 0], strict=True), kind))
    for text in (
        "a[0] @ b[:, 0]",
        "np.dot(a[0], b[:, 0])",
        "np.vdot(a[0], b[:, 0])",
        "np.einsum('i,i', a[0], b[:, 0])",
    ):
        assert ours(text, form, a=a, b=b) == dot, text
    two = [kind(kind(x * y) * y) for x, y in zip(one[0], other[:, 0], strict=True)]
    assert ours("np.einsum('i,i,i->', a[0], b[:, 0], b[:, 0])", form, a=a, b=b) == float(total(two, kind))


@pytest.mark.parametrize("form", TYPES)
def test_variance_average_trapezoid_and_convolution(form):
    """Written out in the type: deviations from the mean, weighted sums, trapezoids, and sums along the shorter one."""
    kind = TYPES[form]
    a, w = draws(4, 40), abs(draws(5, 40))
    x, y = a.astype(kind), w.astype(kind)
    mean = kind(total(x, kind) / kind(40))
    squares = [kind(kind(v - mean) * kind(v - mean)) for v in x]
    variance = kind(total(squares, kind) / kind(39))
    assert ours("np.var(a, ddof=1)", form, a=a) == float(variance)
    assert ours("a.std(ddof=1)", form, a=a) == float(kind(np.sqrt(variance)))
    weighted = kind(product_sum(zip(x, y, strict=True), kind) / total(y, kind))
    assert ours("np.average(a, weights=w)", form, a=a, w=w) == float(weighted)
    pieces = [kind(kind(kind(0.25) * kind(x[i + 1] + x[i])) / kind(2)) for i in range(39)]
    assert ours("np.trapezoid(a, dx=0.25)", form, a=a) == float(total(pieces, kind))
    short = y[:3]
    for k in range(42):
        terms = [kind(short[j] * x[k - j]) for j in range(3) if 0 <= k - j < 40]
        assert ours("np.convolve(a, w[:3])", form, a=a, w=w)[k] == float(total(terms, kind))


@pytest.mark.parametrize("form", TYPES)
def test_cholesky_and_solve_are_written_out_in_the_format(form):
    """The same columns and eliminations in the type, number by number; stacks give each matrix its own result."""
    kind = TYPES[form]
    root = draws(6, 5, 5)
    a = root @ root.T + 5 * np.eye(5)
    own = a.astype(kind)
    factor = np.zeros((5, 5), kind)
    for j in range(5):
        for i in range(j, 5):
            rest = own[i, j]
            for k in range(j):
                rest = kind(rest - kind(factor[i, k] * factor[j, k]))
            factor[i, j] = kind(np.sqrt(rest)) if i == j else kind(rest / factor[j, j])
    assert np.array_equal(ours("np.linalg.cholesky(a)", form, a=a), factor.astype(float))
    assert np.array_equal(ours("np.linalg.cholesky(np.stack([a, a]))[1]", form, a=a), factor.astype(float))
    b = draws(7, 5)
    got = ours("np.linalg.solve(a, b)", form, a=a, b=b)
    left, right = own.copy(), b.astype(kind)
    for j in range(5):
        pivot = j + int(np.argmax(np.abs(left[j:, j].astype(float))))
        left[[j, pivot]], right[[j, pivot]] = left[[pivot, j]], right[[pivot, j]]
        for i in range(j + 1, 5):
            ratio = kind(left[i, j] / left[j, j])
            left[i] = [kind(v - kind(ratio * p)) for v, p in zip(left[i], left[j], strict=True)]
            right[i] = kind(right[i] - kind(ratio * right[j]))
    for i in reversed(range(5)):
        for k in range(i + 1, 5):
            right[i] = kind(right[i] - kind(right[k] * left[i, k]))
        right[i] = kind(right[i] / left[i, i])
    assert np.array_equal(got, right.astype(float))
    # the residual is bounded by the dimension, the growth and the unit roundoff: Higham, Accuracy and Stability of
    # Numerical Algorithms, theorem 9.5, recalled from memory; here with the growth bounded by 2^(n-1)
    bound = 3 * 5**3 * 2**4 * float(ml_dtypes.finfo(kind).eps) * np.abs(own.astype(float)).max() * np.abs(got).max()
    assert np.abs(own.astype(float) @ got - b.astype(kind).astype(float)).max() <= bound


@pytest.mark.parametrize("form", TYPES)
def test_the_spacing_and_the_next_value_are_the_formats(form):
    """spacing is 2^(exponent + 1 - precision), nextafter one spacing on: of the format, not of its carrier."""
    precision = 11 if form == "float16" else 8
    values = np.array([1.0, 1.5, 3.0, 0.25])
    expected = 2.0 ** (np.floor(np.log2(values)) + 1 - precision)
    assert np.array_equal(ours("np.spacing(x)", form, x=values), expected)
    assert np.array_equal(ours("np.nextafter(x, 9.0)", form, x=values), values + expected)


# expression, what the observer sees of it in a run of 7 paths
PATHS = {
    "np.mean(x, axis=1)": ("mean over paths", "whole"),
    "x.mean(axis=-1)": ("mean over paths", "whole"),
    "x.std(axis=1)": ("std over paths", "whole"),
    "np.sum(x, 1)": ("sum over paths", "whole"),
    "np.mean(x)": ("mean over paths", "whole"),
    "np.add.reduce(x, axis=1)": ("add.reduce over paths", "whole"),
    "x @ x.T": ("matmul over paths", "whole"),
    "np.einsum('ip,jp->ij', x, x)": ("einsum over paths", "whole"),
    "np.sum(x, 0)": ("sum", "accumulated"),
    "np.mean(x, axis=0)": ("mean", "accumulated"),
    "np.cumsum(x, axis=1)": ("cumsum", "accumulated"),
    "q @ x": ("matmul", "accumulated"),
}


@pytest.mark.parametrize("form", [*NARROW, "float64"])
@pytest.mark.parametrize("text", PATHS)
def test_a_reduction_over_paths_stays_in_float64(text, form):
    """Only over an axis as long as the run has paths: computed in float64, rounded once, listed under its name."""
    x, q = draws(8, 4, 7), draws(9, 4, 4)
    log = Log()
    got = ours(text, form, paths=7, observer=log, x=x, q=q)
    assert log.operations == [PATHS[text]]
    if PATHS[text][1] == "whole":
        _, setting = module_of("", form)
        rounded = [np.asarray(owned(array, setting)._carrier, float) for array in (x, q)]
        plain = eval(text, {"np": np, "x": rounded[0], "q": rounded[1]})
        assert np.array_equal(got, np.asarray(setting.arithmetic.cast(np.asarray(plain)), float))


@pytest.mark.parametrize("form", [*NARROW, "float64"])
def test_a_reduction_that_may_be_over_paths_is_refused(form):
    """Where two axes are as long as the run has paths nobody can say which of them is theirs."""
    x = draws(8, 4, 7)
    with pytest.raises(RefusedError, match="several axes have the length of the paths, 7: whether sum is over paths"):
        ours("np.sum(np.stack([x[0]] * 7), axis=0)", form, paths=7, x=x)
    assert ours("np.stack([x[0]] * 7)[0]", form, paths=7, x=x).shape == (7,)


def test_a_mean_over_many_paths_does_not_overflow():
    """50,000 payoffs of 100 have the mean 100 in float16, where their sum has no value; without paths it overflows."""
    payoffs = np.full(50_000, 100.0)
    assert ours("x.mean()", "float16", paths=50_000, x=payoffs) == 100
    assert ours("x.mean()", "float16", x=payoffs) != 100


@pytest.mark.parametrize(
    ("text", "error"),
    [
        ("x @ x", ValueError),
        ("np.dot(x, x)", ValueError),
        ("np.einsum('ij,jk', x, x)", ValueError),
        ("x.sum(axis=5)", np.exceptions.AxisError),
        ("np.linalg.cholesky(x @ x.T * -1.0)", np.linalg.LinAlgError),
        ("np.linalg.solve(x[:, :4] * 0.0, x)", np.linalg.LinAlgError),
        ("np.average(x, weights=x[0])", (TypeError, ValueError)),
        ("x[0, 0] @ x", ValueError),
    ],
)
@pytest.mark.parametrize("form", [*NARROW, "float64"])
def test_numpys_errors_are_numpys(text, error, form):
    """What plain NumPy raises of shapes and pivots is raised in every format, and is no fault of the run."""
    x = draws(10, 4, 7)
    with pytest.raises(error):
        call(f"import numpy as np\ndef kernel(x):\n    return {text}\n", None, x)
    with pytest.raises(error) as raised:
        call(f"import numpy as np\ndef kernel(x):\n    return {text}\n", form, x)
    assert not isinstance(raised.value, DispatchError)
