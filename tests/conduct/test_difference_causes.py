"""Whether a fused multiply-add or a wider intermediate explains a difference, decided from the rows alone."""

from __future__ import annotations

from fractions import Fraction

import pytest
from difference_cases import emulated, itself, kernel, traces

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.firstdifference import first_difference
from narrowgauge.conduct.tracingcauses import explains

LOW = kernel("S = S + S * dw")
BACK = kernel("S = S - dw * S")
FRONT = kernel("S = S * dw - 0.1 * S")
FUSED32 = kernel("S = (S.astype('f4') * dw + S).astype(S.dtype)")
FUSED64 = kernel("S = (S.astype(float) * dw + S).astype(S.dtype)")
LONG = kernel("S = S + 0.2 * S * dw")

# name: format, low branch, correction branch, what explains it
CAUSES = {
    "fused in float64": ("float32", LOW, FUSED64, "fused multiply-add"),
    "fused in float32": ("float16", LOW, FUSED32, "fused multiply-add"),
    "bfloat16": ("bfloat16", LOW, FUSED32, "fused multiply-add"),
    "from the difference": (
        "float16", BACK, kernel("S = (S - dw * S.astype('f4')).astype(S.dtype)"), "fused multiply-add",
    ),
    "product in front": (
        "float16", FRONT, kernel("T = 0.1 * S\nS = (S.astype('f4') * dw - T).astype(S.dtype)"), "fused multiply-add",
    ),
    "low is the fused one": ("float16", FUSED32, LOW, "fused multiply-add"),
    "two products wide": (
        "float16", LONG, kernel("S = S + (np.float16(0.2) * S.astype('f4') * dw).astype(S.dtype)"),
        "wider intermediate",
    ),
    "all of it wide, with its constants": (
        "float16", LONG, kernel("S = S.astype('f4')\nS = (S + 0.2 * S * dw).astype(dw.dtype)"), "wider intermediate",
    ),
    "float64 in float32": (
        "float32", kernel("S = S * dw * S"), kernel("S = (S.astype(float) * dw * S).astype(S.dtype)"),
        "wider intermediate",
    ),
    "sum wide, too": (
        "float16", kernel("T = S + S * dw\nS = T * T"),
        kernel("T = S.astype('f4') * dw + S\nS = (T * T).astype(S.dtype)"), "wider intermediate",
    ),
    "product wide, in a sum that does not feel it": (
        "float16", kernel("P = 0.3 * dw\nT = P + 4096.0\nS = P * P"),
        kernel("P = np.float16(0.3) * dw.astype('f4')\nT = (P + 4096.0).astype(S.dtype)\nS = (P * P).astype(S.dtype)"),
        "wider intermediate",
    ),
    "exponential": (
        "float16", kernel("S = S * np.exp(dw)"), kernel("S = (S * np.exp(dw.astype('f4'))).astype(S.dtype)"),
        "wider intermediate",
    ),
    "reordered": ("float16", kernel("S = S + (S * 0.3 + dw)"), kernel("S = (S + S * 0.3) + dw"), None),
    "another constant": ("float16", LONG, kernel("S = S + 0.21 * S * dw"), None),
    "hoisted": ("float16", LONG, kernel("S = S + 0.2 * (S * dw)"), None),
}  # fmt: skip


@pytest.mark.parametrize("name", CAUSES)
def test_what_explains_a_difference(name):
    """Both ways of rounding less, in either branch; reordered, hoisted and changed ones are explained by neither."""
    form, low, correction, cause = CAUSES[name]
    for seed in range(5):
        one, two = traces(itself, low, correction, form, paths=256, seed=seed)
        found = first_difference(one, two, form=FORMATS[form])
        assert explains(found, one, two, FORMATS[form]) == cause


def test_a_fused_result_from_out_of_sight_is_explained():
    """What a foreign function gives is known by its row, though the trace does not see how it is made."""
    cut = "\nS = np.maximum(S, dw * 0.0 - 9.0)"
    foreign = "a, b = (np.frombuffer(one.tobytes(), one.dtype).astype('f4') for one in (S, dw))"
    foreign += "\nS = (a * b + a).astype(S.dtype)"
    one, two = traces(itself, kernel("S = S + S * dw" + cut), kernel(foreign + cut), "float16")
    found = first_difference(one, two, form=FORMATS["float16"])
    assert found.correction.kind == "untraced"
    assert found.low.operation == "multiply"
    assert explains(found, one, two, FORMATS["float16"]) == "fused multiply-add"


def test_an_emulated_difference_is_explained_by_neither():
    """In an emulated run every operation rounds: a reordered sum there is no wider intermediate."""
    one, two = traces(emulated, LONG, kernel("S = S + 0.2 * (S * dw)"), "float16")
    assert explains(first_difference(one, two, form=FORMATS["float16"]), one, two, FORMATS["float16"]) is None


def test_one_path_that_rounds_otherwise_is_not_explained():
    """The rounded row with one path moved is no row of a fused multiply-add: every path has to agree."""
    moved = kernel("S = S.astype('f4') * dw + S\nS[3] *= 2\nS = S.astype(dw.dtype)")
    one, two = traces(itself, LOW, moved, "float16")
    found = first_difference(one, two, form=FORMATS["float16"])
    assert explains(found, one, two, FORMATS["float16"]) == "wider intermediate"


def test_the_fused_row_is_that_of_exact_rational_arithmetic():
    """On the second step, where S is no power of 2: fractions rounded once to float16 are what the correction has."""
    one, two = traces(itself, LOW, FUSED32, "float16", steps=2)
    state = two.values(two.operations[-1].operands[0].keys[0])
    assert state.shape == (64,)
    sums = [operation for operation in two.operations if operation.name == "astype"]
    results = two.values(sums[-1].results[0].keys[0])
    multiplied = [operation for operation in two.operations if operation.name == "multiply"][-1]
    first, second = (two.values(kept.keys[0]) for kept in multiplied.operands)
    exact = [Fraction(a) * Fraction(b) + Fraction(a) for a, b in zip(first, second, strict=True)]
    assert [_rounded(number) for number in exact] == results.tolist()
    assert explains(first_difference(one, two, form=FORMATS["float16"]), one, two, FORMATS["float16"])


def _rounded(number):
    """A fraction rounded once to float16's normal numbers, ties to even, by Python's own rounding."""
    if number == 0:
        return 0.0
    exponent = 0
    while abs(number) >= Fraction(2) ** (exponent + 1):
        exponent += 1
    while abs(number) < Fraction(2) ** exponent:
        exponent -= 1
    unit = Fraction(2) ** (exponent - 10)
    return float(round(number / unit) * unit)
