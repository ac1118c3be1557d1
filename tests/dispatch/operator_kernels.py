"""Kernels that apply one of Python's operators to the state and to everything else that a kernel has at hand."""

from __future__ import annotations

import textwrap

__all__ = ["IN_PLACE", "SYMBOLS", "in_place", "operators"]

SYMBOLS = ("+", "-", "*", "/", "//", "%", "**", "<", "<=", ">", ">=", "==", "!=")
IN_PLACE = ("+", "-", "*", "/", "//", "%", "**")

# operands that meet the state: the exponents 2, .5, -1, 3 take shortcuts of their own in NumPy
CONSTANTS = (
    "2", "3", "-1", "0", "True", "0.3", "0.5", "-1.0", "3.0", "1e-30", "7e5", "float('nan')", "np.float64(0.3)",
    "np.float64(2.0)", "np.float64(3)", "np.float32(0.3)", "np.float16(0.3)", "np.int64(3)", "np.int32(2)",
    "np.bool_(True)", "np.array(0.3)",
)  # fmt: skip
PLAIN_ARRAYS = (
    "np.linspace(0.1, 0.9, 5)", "np.arange(5)", "np.arange(5) * 0.3", "np.arange(5) > 2", "np.float32(np.arange(5))",
    "[0.1, 0.2, 0.3, 0.4, 0.5]", "(1, 2, 3, 4, 5)", "np.linspace(-1.0, 1.0, 10).reshape(2, 5)",
)  # fmt: skip
STATES = ("x", "y", "x[1]", "x[1:2]", "np.array(0.7)", "x.reshape(5, 1)", "x[::-1]", "x > 1.0", "x[0] > 1.0")


# what plain code raises, the arithmetic must raise too
ATTEMPT = """
def attempt(work):
    try:
        return work()
    except (ArithmeticError, IndexError, TypeError, ValueError) as problem:
        return type(problem).__name__
"""


def operators(symbol):
    """A kernel that applies one binary operator to the state and everything else, either way round."""
    others = [*CONSTANTS, *PLAIN_ARRAYS, *STATES]
    pairs = [f"({one}) {symbol} ({other})" for one in STATES[:6] for other in others]
    pairs += [f"({other}) {symbol} ({one})" for one in STATES[:6] for other in CONSTANTS + PLAIN_ARRAYS]
    # a NumPy scalar times a list is an error of Python's, for which no list of numbers is needed
    pairs = [pair for pair in pairs if not (symbol == "*" and "(x[1])" in pair and ("([" in pair or "((" in pair))]
    lines = "".join(f"        attempt(lambda: {pair}),\n" for pair in pairs)
    return f"{ATTEMPT}\ndef kernel(x, y, a):\n    return [\n{lines}    ]\n"


def change(target, symbol, other):
    """Lines that change a target in place and keep it under two names."""
    return [
        f"v = w = {target}", "try:", f"    w {symbol}= {other}", "    out.append((v, w))",
        "except (ArithmeticError, TypeError, ValueError) as problem:", "    out.append(type(problem).__name__)",
    ]  # fmt: skip


def in_place(symbol):
    """A kernel that applies one in-place operator to arrays, views, 0-d arrays and 0-d values."""
    lines = []
    for target in ("x.copy()", "a.T.copy()[:, 0]", "a.copy('F')[0]", "x[::-1].copy()", "np.array(0.7)", "x[1]"):
        for other in (*CONSTANTS, "y[0]", "x[0] > 1.0"):
            lines += change(target, symbol, other)
    for other in (*PLAIN_ARRAYS[:7], "y", "x[::-1]", "x > 1.0"):
        lines += change("x.copy()", symbol, other)
    for place in ("1", "1:", "::2", "[0, 2]", "x > 1.0", "..."):
        lines += ["v = x.copy()", f"v[{place}] {symbol}= 0.3", "out.append(v)"]
    return "def kernel(x, y, a):\n    out = []\n" + textwrap.indent("\n".join(lines), "    ") + "\n    return out\n"
