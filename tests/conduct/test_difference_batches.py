"""One function in two batches: paths that depend on others, and contractions whose bits depend on the batch size."""

from __future__ import annotations

import numpy as np
import pytest
from difference_cases import emulated, itself, kernel, marked, normals, places

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.firstdifference import first_difference
from narrowgauge.conduct.tracingrepeats import laid_out, repeated

MATCHED = kernel("S = S + S * 0.2 * dw", before="dW = dW - np.mean(dW, axis=1, keepdims=True)  # here\n")
SUMMED = kernel("S = S * 0.5", before="dW = np.sum(dW, axis=0)[None]  # here\nS = S + dW[0]\n")
APART = kernel("S = S + S * 0.2 * dw")


@pytest.mark.parametrize(("run", "form"), [(emulated, "float16"), (emulated, "float64"), (itself, "float32")])
def test_a_step_that_couples_paths_is_located(run, form):
    """Moment matching: path 5 and its neighbours depend on a path that changed; the operation says that it couples."""
    draws = normals(form, paths=32)
    changed = draws.copy()
    changed[:, 20] *= 4
    kept = range(16)
    found = first_difference(
        *(run(MATCHED, given, form, "kernel.py", kept) for given in (draws, changed)), form=FORMATS[form]
    )
    assert places(found) == [("kernel.py", marked(MATCHED)[0])] * 2
    assert found.low.operation.startswith("mean")
    assert found.low.couples
    assert found.correction.couples
    assert found.kind == "operation"


def test_numbers_that_occur_elsewhere_do_not_hide_a_difference_of_one_function():
    """Two means that both are constants of the kernel, too, and one path: operations are compared by position."""
    source = kernel("S = S * 0.25 + dw * 0.5", before="dW = dW - np.mean(dW, axis=1, keepdims=True)  # here\n")
    draws = np.array([[1.0, 0.0, 0.5]])
    pair = [itself(source, np.append(draws, [[last]], 1), "float16", "kernel.py", [0]) for last in (0.5, -0.5)]
    found = first_difference(*pair, form=FORMATS["float16"])
    assert [side.result for side in (found.low, found.correction)] == [0.5, 0.25]
    assert places(found) == [("kernel.py", marked(source)[0])] * 2


@pytest.mark.parametrize(("run", "form"), [(emulated, "float16"), (itself, "float32")])
def test_paths_apart_do_not_differ(run, form):
    """Negative control: a kernel whose paths are apart, among other paths and in a batch of another size."""
    draws = normals(form, paths=32)
    changed = draws.copy()
    changed[:, 20] *= 4
    one, two, three = (run(APART, given, form, "kernel.py", range(16)) for given in (draws, changed, draws[:, :16]))
    assert first_difference(one, two, form=FORMATS[form]) is None
    assert first_difference(one, three, form=FORMATS[form]) is None


@pytest.mark.parametrize("run", [emulated, itself])
def test_a_sum_whose_order_depends_on_the_batch_is_located_and_is_numpys_own(run):
    """NumPy adds rows of many paths in order, and the 200 numbers of one path by parts: other bits in float32."""
    draws = normals("float32", steps=200, paths=24)
    many, one = run(SUMMED, draws, "float32", "kernel.py", [3]), run(SUMMED, draws[:, 3:4], "float32", "kernel.py")
    found = first_difference(many, one, form=FORMATS["float32"])
    assert places(found) == [("kernel.py", marked(SUMMED)[0])] * 2
    assert found.low.operation == found.correction.operation == "sum"
    assert found.path == 3
    assert found.ulps > 0
    assert repeated(many, found.low.number, paths=1) is True
    assert repeated(many, found.low.number, paths=48) is False
    assert repeated(many, found.low.number + 1, paths=1) is False  # an addition


def test_a_contraction_is_located_where_blas_has_other_bits_for_one_column():
    """A product of matrices: whether NumPy differs is for NumPy to say, and where it does the line is named."""
    source = kernel(
        "S = S * 0.5",
        before="L = np.cos(np.arange(2500).reshape(50, 50)).astype(dW.dtype)\nS = S + (L @ dW)[7]  # here\n",
    )
    draws = normals("float32", steps=50, paths=24)
    many, one = (
        itself(source, given, "float32", "kernel.py", kept) for given, kept in ((draws, [3]), (draws[:, 3:4], [0]))
    )
    L = np.cos(np.arange(2500).reshape(50, 50)).astype(np.float32)
    given = draws.astype(np.float32)
    differs = (L @ given)[7, 3] != (L @ given[:, 3:4])[7, 0]
    found = first_difference(many, one, form=FORMATS["float32"])
    assert (found is not None) == differs
    if found is not None:
        assert places(found) == [("kernel.py", marked(source)[0])] * 2
        assert found.low.operation == "matmul"


def test_einsum_of_an_emulated_run_is_found_again_by_its_bits():
    """The observer is told no subscripts: those that give the bits of the run are taken; 16 bits are nobody's own."""
    source = kernel("S = S * 0.5", before="L = np.cos(np.arange(50.0))\nS = S + np.einsum('k,kp->p', L, dW)  # here\n")
    answers = []
    for form in ("float32", "float16"):
        trace = emulated(source, normals(form, steps=50, paths=24), form, "kernel.py")
        number = next(n for n, operation in enumerate(trace.operations) if operation.name == "einsum")
        answers.append(repeated(trace, number, paths=48))
    assert answers == [False, None]


@pytest.mark.parametrize("layout", ["C", "Fortran", "strided", "reversed"])
def test_a_layout_changes_memory_and_no_value(layout):
    """Rows and matrices alike; and a sum in another layout is asked of NumPy, which never differs for an addition."""
    for shape in ((5,), (3, 5), ()):
        array = np.random.default_rng(1).normal(size=shape)
        again = laid_out(array, layout)
        assert np.array_equal(again, array)
        if shape:
            assert again.flags.c_contiguous == (layout == "C")
    trace = itself(APART, normals("float32", paths=24), "float32", "kernel.py")
    assert [repeated(trace, number, layout=layout) for number in range(3)] == [False] * 3


@pytest.mark.parametrize("name", ["exp", "log1p", "sqrt"])
def test_a_function_of_a_reversed_view_is_asked_of_numpy(name):
    """Some processors have other bits for a step of -1: the answer is what plain NumPy shows here for the same row."""
    draws = np.abs(normals("float64", steps=1, paths=200))
    function = getattr(np, name)
    backwards = np.ascontiguousarray(draws[0, ::-1])[::-1]
    trace = emulated(kernel(f"S = S * np.{name}(dw)"), draws, "float64", "kernel.py")
    assert trace.operations[0].name == name
    assert repeated(trace, 0, layout="reversed") == (function(backwards) != function(draws[0])).any()


def test_reductions_over_paths_and_strangers_cannot_be_repeated():
    """A mean over the paths has no row, and an operation that NumPy does not have under that name is not asked for."""
    trace = itself(MATCHED, normals("float32", paths=24), "float32", "kernel.py")
    assert repeated(trace, 0, paths=12) is None
    trace = emulated(APART, normals("float64"), "float64", "kernel.py")
    trace.operations[0] = trace.operations[0]._replace(name="no_such_function")
    assert repeated(trace, 0, paths=12) is None
