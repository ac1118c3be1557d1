"""What several of these files share: MPFR's answers for every input of the 16-bit formats, made once."""

from __future__ import annotations

import mpfr_oracle as oracle
import pytest

from narrowgauge.arithmetic.elementary import WAYS


@pytest.fixture(scope="session")
def one_operand() -> dict[tuple[str, str], oracle.Doubles]:
    """Return MPFR's results by format and function: all functions by table, and square, reciprocal, sqrt."""
    functions = [ufunc.__name__ for ufunc, way in WAYS.items() if way == "table"]
    answers = {}
    for name in oracle.SIXTEEN_BITS:
        values = oracle.to_mpfr(oracle.all_values(name), name)
        for function in [*functions, "square", "reciprocal", "sqrt"]:
            answers[name, function] = oracle.unary(function, values, name)
    return answers
