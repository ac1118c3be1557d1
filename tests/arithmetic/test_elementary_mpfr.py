"""Functions of one operand in the 16-bit formats: every input against MPFR, also with NumPy's dispatch off."""

from __future__ import annotations

import importlib
import os
import subprocess
import sys
from pathlib import Path

import mpfr_oracle as oracle
import numpy as np
import pytest

from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.arithmetic.rounding import round_carrier

TABLES = [ufunc.__name__ for ufunc, way in WAYS.items() if way == "table"]
TWO_OPERANDS = ["power", "arctan2", "hypot", "remainder", "floor_divide", "logaddexp", "logaddexp2"]

# Run in a process of its own: the features are chosen when NumPy is first imported.
PROGRAM = """
import sys
import mpfr_oracle as oracle
import numpy as np
from numpy._core._multiarray_umath import __cpu_dispatch__, __cpu_features__

found = {}
for request in sys.argv[2:]:
    name, function = request.split(":")
    unary = getattr(np, function).nin == 1
    inputs = [oracle.all_values(name)] if unary else oracle.all_pairs(oracle.edge_values(name))
    found[request] = oracle.computed(name, function, *inputs)
np.savez(sys.argv[1], enabled=[feature for feature in __cpu_dispatch__ if __cpu_features__[feature]], **found)
"""

Answers = dict[tuple[str, str], oracle.Doubles]


def test_every_table_has_its_reference(one_operand: Answers) -> None:
    """The functions compared below are all that are looked up, the 18 with a standard's name among them."""
    assert {function for _, function in one_operand} == {*TABLES, "square", "reciprocal", "sqrt"}
    assert {*oracle.UNARY} <= {*TABLES}
    assert {function: len(answer) for (_, function), answer in one_operand.items()} == dict.fromkeys(
        [*TABLES, "square", "reciprocal", "sqrt"], 1 << 16
    )


@pytest.mark.parametrize("function", [*TABLES, "square", "reciprocal", "sqrt"])
@pytest.mark.parametrize("name", oracle.SIXTEEN_BITS)
def test_every_input_gives_mpfrs_bits(name: str, function: str, one_operand: Answers) -> None:
    """All 65,536 inputs, zeros of both signs, infinities and NaN included, are rounded correctly."""
    values = oracle.all_values(name)
    wrong = oracle.differ(oracle.computed(name, function, values), one_operand[name, function])
    assert values[wrong].tolist() == []


def test_every_input_gives_mpfrs_bits_without_vector_instructions(one_operand: Answers, tmp_path: Path) -> None:
    """With every optional instruction set of this processor switched off in NumPy the results are the same bits.

    The tables must equal MPFR, the functions of two operands what this process computes with everything on.
    """
    numpy_core = importlib.import_module("numpy._core._multiarray_umath")
    enabled = [feature for feature in numpy_core.__cpu_dispatch__ if numpy_core.__cpu_features__[feature]]
    requests = [f"{name}:{function}" for name in oracle.SIXTEEN_BITS for function in [*TABLES, *TWO_OPERANDS]]
    environment = {
        **os.environ,
        "NPY_DISABLE_CPU_FEATURES": " ".join(enabled),
        "PYTHONPATH": os.pathsep.join([str(Path(oracle.__file__).parent), *filter(None, sys.path)]),
    }
    saved = tmp_path / "found.npz"
    command = [sys.executable, "-W", "error", "-c", PROGRAM, str(saved), *requests]
    subprocess.run(command, env=environment, check=True)
    with np.load(saved) as found:
        assert found["enabled"].size == 0
        for request in requests:
            name, function = request.split(":")
            if function in TWO_OPERANDS:
                pairs = oracle.all_pairs(oracle.edge_values(name))
                want = oracle.computed(name, function, *pairs).astype(np.float64)
            else:
                want = one_operand[name, function]
            assert oracle.differ(found[request], want).size == 0, request


def through_binary32(function: str) -> oracle.Doubles:
    """Return a function of all binary16 inputs, rounded to binary32 by MPFR first and to binary16 then."""
    single = oracle.context("float32")
    first = oracle.reckon(
        getattr(single, oracle.UNARY[function]), oracle.to_mpfr(oracle.all_values("float16"), "float32")
    )
    return oracle.reckon(float, oracle.to_mpfr(first, "float16"))


def test_even_a_perfect_binary32_function_would_not_do(one_operand: Answers) -> None:
    """Negative control: rounding to binary32 on the way is wrong for just these inputs of exp, one of log, 4 of sin.

    Computed from first principles: the comparison sees a single wrong input among 65,536.
    """
    values = oracle.all_values("float16")
    wrong = {
        function: oracle.differ(through_binary32(function), one_operand["float16", function])
        for function in ("exp", "log", "sin")
    }
    assert values[wrong["exp"]].tolist() == [0.007297515869140625, 0.0226898193359375]
    assert wrong["log"].size == 1
    assert wrong["sin"].size == 4


def test_numpys_binary32_functions_would_not_do(one_operand: Answers) -> None:
    """Negative control: the tables made in float32 instead of float64 are wrong somewhere on any processor."""
    wrong = 0
    for function in oracle.UNARY:
        values = oracle.all_values("float16").astype(np.float32)
        with np.errstate(all="ignore"):
            found = round_carrier(getattr(np, function)(values), FORMATS["float16"])
        wrong += oracle.differ(found, one_operand["float16", function]).size
    assert wrong > 0
