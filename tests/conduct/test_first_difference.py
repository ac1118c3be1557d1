"""Seeded defects are located to their line, by value; what was only moved or spelled in another way is not."""

from __future__ import annotations

import numpy as np
import pytest
from difference_cases import (
    STEP,
    emulated,
    itself,
    kernel,
    located,
    marked,
    normals,
    own_function,
    places,
    traces,
)  # fmt: skip

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.firstdifference import first_difference
from narrowgauge.conduct.tracing import Trace
from narrowgauge.conduct.tracingown import run_traced

PLAIN = kernel(
    """
    drift = 0.05 * h * S
    noise = 0.2 * S * dw
    S = S + (drift + noise)  # here
    """
)
MOVED = kernel(
    """
    noise = dw * (S * 0.2)
    drift = S * (0.05 * h)
    S = (noise + drift) + S
    """
)

SELECT = "S = np.where(dw > 0, S, T)"

# name: run, format, low branch, correction branch, kind
DEFECTS = {
    "reordered sum": (
        emulated, "float16", PLAIN,
        PLAIN.replace("S + (drift + noise)", "(S + drift) + noise"), "operation",
    ),
    "reordered sum, itself": (
        itself, "bfloat16", PLAIN,
        PLAIN.replace("S + (drift + noise)", "(S + drift) + noise"), "operation",
    ),
    "reordered sum in statements in another order": (
        emulated, "bfloat16", PLAIN,
        MOVED.replace("(noise + drift) + S", "noise + (drift + S)  # here"), "operation",
    ),
    "hoisted product": (
        emulated, "float16", kernel("S = S + 0.2 * S * dw  # here"), kernel("S = S + 0.2 * (S * dw)  # here"),
        "operation",
    ),
    "hoisted product of constants": (
        emulated, "float16", kernel("S = S + 0.05 * 0.3 * S + S * dw  # here"),
        kernel("S = S + 0.05 * (0.3 * S) + S * dw  # here"), "constant",
    ),
    "fused multiply-add": (
        itself, "float32", kernel("S = S + S * dw  # here"),
        kernel("S = np.add(S, np.multiply(S, dw, dtype=float)).astype(S.dtype)  # here"), "operation",
    ),
    "float32 intermediate": (
        itself, "float16", kernel("S = S + np.float16(0.2) * S * dw  # here"),
        kernel("S = S + (np.float16(0.2) * S.astype(np.float32) * dw).astype(S.dtype)  # here"), "operation",
    ),
    "float32 intermediate, and its constant": (
        itself, "float16", kernel("S = S + 0.2 * S * dw  # here"),
        kernel("S = S + (0.2 * S.astype(np.float32) * dw).astype(S.dtype)  # here"), "constant",
    ),
    "float64 constant": (
        itself, "float32", kernel("S = S + np.float32(0.2) * S * dw  # here"),
        kernel("S = (S + np.float64(0.2) * S * dw).astype(S.dtype)  # here"), "constant",
    ),
    "step size not cast": (
        itself, "float16", kernel("S = S + S * np.float16(np.sqrt(h)) * dw  # here"),
        kernel("S = (S + S * np.sqrt(h) * dw).astype(S.dtype)  # here"), "constant",
    ),
    "another step size": (
        emulated, "float16", kernel("S = S + S * np.sqrt(h) * dw  # here"),
        kernel("S = S + S * 0.353 * dw  # here"), "constant",
    ),
    "in one arm of a selection": (
        emulated, "float16", kernel(f"T = S + S * dw\nT = T + (0.5 * T - 0.3)  # here\n{SELECT}"),
        kernel(f"T = S + S * dw\nT = (T + 0.5 * T) - 0.3  # here\n{SELECT}"), "operation",
    ),
    "in one arm of a selection, after what is spelled in another way": (
        emulated, "float16", kernel(f"T = S + (dw - 0.3 * S)\nT = T + (0.5 * T - 0.3)  # here\n{SELECT}"),
        kernel(f"T = S + -(0.3 * S - dw)\nT = (T + 0.5 * T) - 0.3  # here\n{SELECT}"), "operation",
    ),
    "under a mask": (
        emulated, "float16", kernel("S = S * dw\nup = dw > 0\nS[up] = S[up] + (S[up] * 0.3 - dw[up])  # here"),
        kernel("S = S * dw\nup = dw > 0\nS[up] = (S[up] + S[up] * 0.3) - dw[up]  # here"), "operation",
    ),
    "at the end alone": (
        itself, "float16", kernel("S = S + S * dw").replace("return S", "return S * S * 0.3  # here"),
        kernel("S = dw * S + S").replace("return S", "return S * (S * 0.3)  # here"), "operation",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", DEFECTS)
def test_a_seeded_defect_is_located_to_its_line_on_both_sides(name):
    """The line and kind of each side, over seeds and numbers of paths; and never another line."""
    run, form, low, correction, kind = DEFECTS[name]
    for seed in range(5):
        found = located(run, low, correction, form, seed=seed, paths=(64, 200)[seed % 2])
        assert places(found) == [("low.py", marked(low)[0]), ("correction.py", marked(correction)[0])]
        assert found.kind == kind
        assert found.incomplete is None


def test_draws_that_are_rounded_on_one_side_alone_are_named_as_draws():
    """A branch that takes wide draws and forgets the cast, and one that gets other draws; the value is told."""
    low = kernel("S = S + S * dw  # here")
    forgets = kernel("S = (S + S * dw).astype(np.float16)  # here").replace("1.0, dW.dtype", "1.0, np.float16")
    wide = np.random.default_rng(2).normal(0.0, 0.3, (4, 64)).astype(np.float32)
    rounded = wide.astype(np.float16).astype(np.float64)
    pair = itself(low, rounded, "float16", "low.py"), itself(forgets, wide, None, "correction.py")
    other = emulated(low, rounded, "float16", "low.py"), emulated(low, rounded * 2, "float16", "correction.py")
    for one, two in (pair, other):
        found = first_difference(one, two, form=FORMATS["float16"])
        assert found.kind == "draws"
        assert places(found) == [("low.py", 7), ("correction.py", 7)]
    found = first_difference(*pair, form=FORMATS["float16"])
    assert found.low.strange == rounded[0, found.path]
    assert found.correction.strange == wide[0, found.path]
    assert str(found) == (
        f"low.py:7: multiply takes the draw {found.low.strange!r} where "
        f"correction.py:7: multiply takes the draw {found.correction.strange!r}"
    )


def test_a_pair_of_draws_of_which_the_wide_ones_slip_in_is_named_as_draws():
    """A correction gets its draws in both types; what counts on the other side is what was used there."""
    low = kernel("S = S + S * dw  # here")
    pair = kernel("S = (S + S * dw).astype(S.dtype)  # here", before="narrow, dW = dW\n")
    pair = pair.replace("dW.shape[-1], 1.0, dW.dtype", "dW[0].shape[-1], 1.0, dW[0].dtype")
    wide = np.random.default_rng(2).normal(0.0, 0.3, (4, 64)).astype(np.float32)
    narrow = wide.astype(np.float16)
    one, two = itself(low, narrow, "float16", "low.py"), Trace(64)
    two.gave(run_traced(own_function(pair, "correction.py"), (narrow, wide), STEP, trace=two))
    one.draws(wide)
    found = first_difference(one, two, form=FORMATS["float16"])
    assert found.kind == "draws"
    assert places(found) == [("low.py", marked(low)[0]), ("correction.py", marked(pair)[0])]
    assert found.correction.strange == wide[0, found.path]


def test_casting_wide_draws_is_no_difference():
    """Negative control: a branch that casts them itself has the rows of the branch that is given them."""
    low, casts = kernel("S = S + S * dw"), kernel("S = S + S * dw", before="dW = dW.astype(np.float16)\n")
    casts = casts.replace("1.0, dW.dtype", "1.0, np.float16")
    wide = np.random.default_rng(2).normal(0.0, 0.3, (4, 64)).astype(np.float32)
    rounded = wide.astype(np.float16).astype(np.float64)
    one, two = itself(low, rounded, "float16", "low.py"), itself(casts, wide, None, "correction.py")
    assert first_difference(one, two, form=FORMATS["float16"]) is None


def test_the_example_is_the_first_differing_path_with_operands_and_results():
    """Values are those of the two operations on that path, their distance is in ulps of the format."""
    low = kernel("S = S + S * dw  # here")
    correction = kernel("S = S + (S.astype(np.float32) * dw).astype(np.float32)  # here\nS = S.astype(np.float16)")
    found = located(itself, low, correction, "float16")
    draws = normals("float16").astype(np.float16)
    state = np.ones(64, np.float16)
    for dw in draws:
        narrow, wide = state * dw, state.astype(np.float32) * dw
        if (narrow != wide).any():
            break
        state = state + narrow
    path = int(np.argmax(narrow != wide))
    assert (found.path, found.low.operation, found.correction.operation) == (path, "multiply", "multiply")
    assert found.low.operands == found.correction.operands == (float(state[path]), float(dw[path]))
    assert (found.low.result, found.correction.result) == (float(narrow[path]), float(wide[path]))
    ulp = float(np.spacing(np.abs(narrow[path])))
    assert found.ulps == abs(float(narrow[path]) - float(wide[path])) / ulp
    assert 0 < found.ulps <= 0.5
    assert str(found) == (
        f"low.py:7: multiply of {float(state[path])!r}, {float(dw[path])!r} gives {float(narrow[path])!r} where "
        f"correction.py:7: multiply of {float(state[path])!r}, {float(dw[path])!r} gives {float(wide[path])!r}"
    )


def test_the_path_is_numbered_as_in_the_run():
    """Where a choice of the paths is kept, the example is told by its number among all."""
    low, correction = PLAIN, PLAIN.replace("S + (drift + noise)", "(S + drift) + noise")
    draws = normals("float16")
    whole = [emulated(source, draws, "float16", name) for source, name in ((low, "low.py"), (correction, "c.py"))]
    differing = np.flatnonzero(np.not_equal(*(trace.values(trace.returned[0]) for trace in whole)))
    kept = differing[::-1]
    few = [emulated(source, draws, "float16", name, kept) for source, name in ((low, "low.py"), (correction, "c.py"))]
    found = first_difference(*few, form=FORMATS["float16"])
    assert found.path == kept[0]
    assert found.ulps is None  # two sums of other numbers


@pytest.mark.parametrize("run", [emulated, itself])
@pytest.mark.parametrize("other", [PLAIN, MOVED])
def test_clean_pairs_locate_nothing_over_100_seeds(run, other):
    """The same statements in another order have the same rows throughout: also where no quantity is told."""
    for seed in range(100):
        low, correction = traces(run, PLAIN, other, "float16", paths=16, seed=seed)
        assert first_difference(low, correction, form=FORMATS["float16"]) is None
        low.returned = correction.returned = ()
        assert first_difference(low, correction, form=FORMATS["float16"]) is None


def test_what_comes_out_the_same_in_another_way_is_not_named():
    """-(a - b) for b - a has a row that the other side has not, and the difference is elsewhere."""
    low = kernel("S = S + (dw - 0.3 * S)\nS = S * 0.7 * dw  # here")
    correction = kernel("S = S + -(0.3 * S - dw)\nS = S * (0.7 * dw)  # here")
    found = located(emulated, low, correction, "float16")
    assert places(found) == [("low.py", 8), ("correction.py", 8)]


def test_what_is_computed_beside_is_not_named():
    """A branch computes its other half, and figures of no consequence, from the same draws."""
    low = kernel("S = S + 0.2 * S * dw  # here")
    correction = kernel("H = S * 0.77 + dw\nS = S + 0.2 * (S * dw)  # here")
    found = located(emulated, low, correction, "float16")
    assert places(found) == [("low.py", 7), ("correction.py", 8)]


@pytest.mark.parametrize("run", [emulated, itself])
@pytest.mark.parametrize("select", ["", "; S = np.where(dw > 0.1, S, 0.3)"])
def test_the_other_half_of_a_correction_does_not_hide_the_defect_of_this_one(run, select):
    """Where both halves run in one arithmetic the high half has the rows of the low branch, and leads elsewhere."""
    low = kernel(f"S = S + (0.05 * h * S + 0.2 * S * dw){select}  # here")
    high = f"H = H + (0.05 * h * H + 0.2 * H * dw){select.replace('S', 'H')}"
    half = f"S = (S + 0.05 * h * S) + 0.2 * S * dw{select}  # here"
    correction = kernel(f"{high}\n{half}", before="H = S\n")
    found = located(run, low, correction, "float16")
    assert places(found) == [("low.py", marked(low)[0]), ("correction.py", marked(correction)[0])]
    assert found.kind == "operation"


def test_traces_of_other_numbers_of_paths_are_not_compared():
    """The same paths must be kept on both sides."""
    one, two = (emulated(PLAIN, normals("float16", paths=paths), "float16", "low.py") for paths in (8, 9))
    with pytest.raises(ValueError, match="8 paths are to be compared with 9"):
        first_difference(one, two, form=FORMATS["float16"])
