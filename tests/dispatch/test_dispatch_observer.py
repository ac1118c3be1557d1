"""The observer sees each operation once, with route, operands and result, and each decision; places are the user's."""

from __future__ import annotations

import textwrap

import numpy as np
import pytest
from kernel_runs import FILE, call, module_of, owned

from narrowgauge.dispatch.routes import ROUTES
from narrowgauge.dispatch.setting import Place


class Log:
    """An observer that keeps everything."""

    def __init__(self):
        self.operations, self.carriers, self.places, self.decisions = [], [], [], 0
        self.constants, self.answers, self.ways = [], [], []

    def saw(self, setting, operation, route, operands, result):
        self.operations.append((operation, route))
        self.carriers.append(([np.array(operand) for operand in operands], np.array(result)))
        self.places.append(setting.where())

    def met(self, setting, constant):
        self.constants.append(constant.tolist() if isinstance(constant, np.ndarray) else constant)

    def decided(self, setting, answer):
        self.decisions += 1
        self.answers.append(answer)

    def left(self, setting, way):
        self.ways.append((way, setting.where().line))


def logged(body, form="float16"):
    """The log of a kernel whose first line is line 5 of the file."""
    log = Log()
    text = "import math\nimport numpy as np\n\ndef kernel(x):\n" + textwrap.indent(
        textwrap.dedent(body).strip(), "    "
    )
    result, setting, _ = call(text, form, np.array([0.3, 1.4, 0.75]), observer=log)
    assert setting.faults == []
    return log, result


# statement, what the observer sees
SEEN = {
    "x + 0.1": [("add", "rounded")],
    "0.1 - x": [("subtract", "rounded")],
    "np.linspace(0, 1, 3) * x": [("multiply", "rounded")],
    "np.float64(0.1) * x": [("multiply", "rounded")],
    "x[0] / x[1]": [("divide", "rounded")],
    "x ** 2": [("power", "rounded")],
    "-x": [("negative", "exact")],
    "abs(x[0])": [("absolute", "exact")],
    "x > 0.5": [("greater", "exact")],
    "0.5 > x[0]": [("less", "exact")],
    "np.maximum(x, 0.0)": [("maximum", "exact")],
    "np.exp(x, out=x)": [("exp", "rounded")],
    "math.exp(x[0])": [("exp", "rounded")],
    "math.floor(x[0])": [("floor", "exact")],
    "np.clip(x, 0.2, 0.9)": [("clip", "exact")],
    "x.clip(0.2)": [("clip", "exact")],
    "np.diff(x)": [("subtract", "rounded")],
    "np.diff(x, 2)": [("subtract", "rounded"), ("subtract", "rounded")],
    "x += 0.1": [("add", "rounded")],
    "x[1:] *= x[0]": [("multiply", "rounded")],
    "x[0] += 0.1": [("add", "rounded")],
    "sum(x)": [("add", "rounded")] * 3,
    "0.3 * (x > 0.5)": [("greater", "exact"), ("multiply", "rounded")],
    "(x > 0.5) & (x < 1)": [("greater", "exact"), ("less", "exact")],
    "np.sqrt(x) * np.exp(x)": [("sqrt", "rounded"), ("exp", "rounded"), ("multiply", "rounded")],
    # moves and constants are no operations
    "x[0] = 0.1; x[1:] = x[:2]; np.concatenate([x, x]); np.where([True], x, 0.1); x.T.reshape(3).copy()": [],
    "np.exp(0.1) * np.linspace(0, 1, 3) + np.sqrt(np.array(2))": [],
}  # fmt: skip


@pytest.mark.parametrize("form", ["float64", "bfloat16"])
@pytest.mark.parametrize("statement", SEEN)
def test_each_operation_is_seen_once_with_its_route(statement, form):
    """Whichever side, spelling or keyword: one entry for each operation, none for moves and constants."""
    assert logged(statement, form)[0].operations == SEEN[statement]


def test_the_observer_gets_rounded_operands_and_the_rounded_result():
    """Constants are seen as they met the state, the result as it was rounded."""
    log, _ = logged("x * 0.1")
    (first, second), result = log.carriers[0]
    x, tenth = np.array([0.3, 1.4, 0.75]).astype(np.float16), np.float16(0.1)
    assert np.array_equal(first, x.astype(np.float32))
    assert float(second) == float(tenth)
    assert np.array_equal(result, (x * tenth).astype(np.float32))


def test_the_observer_gets_operands_as_they_were():
    """An operation that writes into an operand, or into memory that it shares, is seen with the operand from before."""
    for body in ("x *= 2", "np.multiply(x, 2, out=x)", "np.multiply(x[:2], 2, out=x[1:])"):
        (first, _), result = logged(body)[0].carriers[0]
        assert np.array_equal(first * 2, result)


@pytest.mark.parametrize(
    ("body", "decisions"),
    [
        ("if x[0] > 0.1: x += 1", 1),
        ("if np.any(x > 0.1): x += 1", 1),
        ("if (x > 0.1).all() and x[0] < 2: x += 1", 2),
        ("while x[0] < 2: x += 1", 3),
        ("if x[0]: x += 1", 1),
        ("y = 1 if not x.any() else 2", 1),
        ("if 0.1 < x[0] < 0.2: x += 1", 2),
        ("y = max(x[0], 0.5)", 1),
        ("y = np.maximum(x, 0.5); z = np.where(x > 1, x, y); x[x > 1] = 3", 0),
        ("if len(x) > 2 and x.ndim == 1: x += 1", 0),
        ("if np.linspace(0, 1, 3)[1] > 0.2: x += 1", 0),
    ],
)
def test_decisions_on_the_state_are_counted(body, decisions):
    """Control flow that depends on the state is counted each time; selections and plain data are not."""
    assert logged(body)[0].decisions == decisions


def test_the_answer_of_a_decision_is_told():
    """A loop that ends is true until it is not; an integer that is taken out counts as true."""
    assert logged("while x[0] < 2: x += 1")[0].answers == [True, True, False]
    assert logged("int(x[1])")[0].answers == [True]


# statement, the constants that the observer is told of, as they were before rounding
MET = {
    "x + 1e-8": [1e-8],
    "1e-8 - x[0]": [1e-8],
    "x * 3": [3],
    "x * np.float64(0.1)": [0.1],
    "x * np.linspace(0, 1, 3)": [[0.0, 0.5, 1.0]],
    "x + [0.1, 0.2, 0.3]": [[0.1, 0.2, 0.3]],
    "x += 1e-8": [1e-8],
    "np.maximum(x, 1e-8)": [1e-8],
    "max(x[0], 1.1e5)": [1.1e5, 1.1e5],  # compared, then chosen
    "np.minimum(np.maximum(x, 0.1), 0.9)": [0.1, 0.9],
    "x[0] = 1e-8": [1e-8],
    "x[:2] = [1e-8, 0.1]": [[1e-8, 0.1]],
    "np.full(3, 1e-8)": [1e-8],
    "np.full_like(x, 1e-8)": [1e-8],
    "np.array([1e-8, 0.1])": [[1e-8, 0.1]],
    "np.where(x > 0, x, 1e-8)": [0, 1e-8],
    "x.fill(1e-8)": [1e-8],
    "math.pow(x[0], 0.3)": [0.3],
    # plain numbers among themselves, values of the state, and what is stored as an exact value
    "0.1 * 3; math.exp(0.1); x + x[0]; x * (x > x[0]); np.zeros(3) + x; np.arange(3); np.zeros(3, int)": [],
}  # fmt: skip


@pytest.mark.parametrize("form", ["float64", "float16"])
@pytest.mark.parametrize("statement", MET)
def test_each_constant_is_met_once_as_it_was(statement, form):
    """Scalars, arrays, lists, stores and creators, in any arithmetic; what never meets the state is not told."""
    assert logged(statement, form)[0].constants == MET[statement]


def test_what_leaves_is_told_with_its_way_and_line():
    """int() and text of any value of the state; range() and branches are decisions alone."""
    log, _ = logged(
        "str(x)\nrepr(x[0])\nf'{x[0]:.3f}'\n'%s' % (x > 0)\nint(x[1])\nrange(np.sum(x > 0))\nint(np.sum(x > 0))"
    )
    assert log.ways == [("text", 5), ("text", 6), ("text", 7), ("text", 8), ("integer", 9), ("integer", 11)]


def test_every_route_reaches_the_observer_under_its_name():
    """The name and the route of each ufunc of the table arrive as they stand in it."""
    for ufunc, route in ROUTES.items():
        log = Log()
        _, setting = module_of("", "bfloat16", log)
        x = owned(np.array([0.3, 0.7]), setting)
        with np.errstate(all="ignore"):
            ufunc(*[x] * ufunc.nin)
        assert log.operations == [(ufunc.__name__, route)]


def test_the_place_is_the_innermost_line_of_the_users_file():
    """Through helpers, generators, lambdas, comprehensions and foreign code that calls back."""
    body = """
        def inner(v):
            return v * 0.3
        def steps(v):
            for _ in range(2):
                v = v + 0.1
                yield v
        y = inner(x)
        z = [w - 0.2 for w in x[:1]]
        list(steps(x))
        list(map(lambda v: v / 3, x[:1]))
        sorted(x[:2], key=lambda v: v ** 2)
        return (x
                + 1.0)
    """
    log, _ = logged(body)
    lines = {"multiply": 6, "subtract": 12, "divide": 14, "power": 15}
    for (operation, _), place in zip(log.operations, log.places, strict=True):
        if operation == "less":  # the comparison inside sorted() is of the line that calls it
            assert place == Place(FILE, 15)
        elif operation == "add":
            assert place.file == FILE
            assert place.line in (9, 16, 17)
        else:
            assert place == Place(FILE, lines[operation])
    assert str(Place(FILE, 6)) == f"{FILE}:6"


def test_without_a_line_of_the_user_there_is_no_place():
    """Outside the user's modules `where` finds nothing."""
    _, setting = module_of("", "float16")
    assert setting.where() is None
