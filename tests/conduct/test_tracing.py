"""What a trace keeps of a run, and that traced arrays change no bit of it."""

from __future__ import annotations

import numpy as np
import pytest
from difference_cases import STEP, emulated, itself, kernel, marked, normals, own_function, places

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct import tracing
from narrowgauge.conduct.firstdifference import first_difference
from narrowgauge.conduct.tracing import Trace
from narrowgauge.conduct.tracingown import run_traced
from narrowgauge.dispatch.copies import new_setting

OWN = ("float16", "bfloat16", "float32", "float64")
LOW = kernel("S = S + (0.05 * h * S + 0.2 * S * dw)  # here")
OTHER = LOW.replace("S + (0.05 * h * S + 0.2 * S * dw)", "(S + 0.05 * h * S) + 0.2 * S * dw")

# statements on z (steps, paths), and on its first row x, as an own kernel can have them
STATEMENTS = (
    "x + 0.1", "2 * x", "x ** 2", "x ** 0.5", "-x", "abs(x)", "x > 0", "divmod(x, 0.5)[1]", "0.5 // x", "1 / x",
    "np.exp(x)", "np.add(x, x, out=x)", "np.where(x > 0, x, 0.0)", "np.maximum(x, 0.0)", "np.clip(x, -0.1, 0.1)",
    "z.sum(axis=0)", "z.mean(axis=0)", "z.std(axis=0)", "z.var(0)", "np.mean(z, axis=0)", "z.max(0)", "z.cumsum(0)[-1]",
    "np.cumsum(z, axis=0)[-1]", "np.add.reduce(z)", "z.sum(axis=1)[0] * x", "x - x.mean()",
    "x.astype(np.float32) * 0.3",
    "np.concatenate([x, x])[:x.size]", "np.stack([x, x * 2])[1]", "z.T[:, 0] * 3", "x[::-1] + x",
    "z.reshape(-1)[: x.size]",
    "np.ones_like(x) * x", "np.zeros(x.shape, x.dtype) + x", "np.empty_like(z)[0] * 0 == 5", "np.diff(z, axis=0)[0]",
    "np.array([x[0], x[1]]) * 2", "np.asarray(x) is x", "np.asarray(x, np.float32) * x",
    "np.linspace(0, 1, x.size) * x",
    "np.sort(x)", "np.argsort(x)", "np.interp(x, [0, 1], [1, 2])", "np.round(x, 1)", "x.copy() + 1", "float(x[0]) * x",
    "x[0] * x[1] + x", "x.take([1, 0]) * 2", "np.modf(x)[0]", "np.sqrt(np.abs(x)).clip(0, 1)", "bool((x > 0).any())",
)  # fmt: skip
CONTRACTIONS = ("np.einsum('ij,jp->ip', np.eye(4, dtype=z.dtype), z)[1]", "np.eye(4, dtype=z.dtype) @ z", "z.dot(z.T)")
BLOCKS = (
    "y = x.copy()\ny += 1\ny *= x\nresult = y",
    "y = x.copy()\ny[x > 0] = 0.5\ny[0] = 3\nresult = y * 2",
    "y = np.empty(z.shape, z.dtype)\ny[0] = x\nfor n in range(3): y[n + 1] = y[n] + y[n] * z[n]\nresult = y[-1]",
    "y = x.copy()\nnp.add.at(y, [0, 0], x[1])\nresult = y",
    "y = np.zeros_like(x)\nnp.multiply(x, 3, out=y, where=x > 0)\nresult = y",
    "y = np.zeros_like(x)\nz.sum(axis=0, out=y)\nresult = y",
    "y = x.copy()\ny.sort()\nresult = {'a': y, 'b': [x, (x, 1.0)]}",
)


def text_of(block):
    """The source of a kernel that sets `result` of its draws z and their first row x."""
    lines = "".join(f"    {line}\n" for line in block.splitlines())
    return f"import numpy as np\nfrom numpy import zeros\n\ndef kernel(z, h):\n    x = z[0]\n{lines}    return result\n"


def bytes_of(value):
    """Type, shape, layout and bytes of every array in a nest."""
    if isinstance(value, dict):
        return {name: bytes_of(item) for name, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [bytes_of(item) for item in value]
    if isinstance(value, np.ndarray):
        return type(value).__name__, value.dtype.str, value.shape, value.strides, value.tobytes()
    return type(value).__name__, repr(value)


@pytest.mark.parametrize("form", OWN)
@pytest.mark.parametrize("block", [*(f"result = {one}" for one in (*STATEMENTS, *CONTRACTIONS)), *BLOCKS])
def test_a_traced_run_has_the_bits_of_the_run_without(block, form):
    """Operators, functions, methods, buffers, masks and targets; what is returned is plain, laid out the same."""
    draws = normals(form, paths=24).astype(FORMATS[form].storage)
    answers = []
    for traced in (False, True):
        function = own_function(text_of(block))
        given, trace = draws.copy(), Trace(24)
        try:
            with np.errstate(all="ignore"):
                result = run_traced(function, given, STEP, trace=trace) if traced else function.function(given, STEP)
        except TypeError as problem:  # what the type cannot do it cannot do traced
            result = type(problem).__name__
        answers.append((bytes_of(result), given.tobytes()))
    assert answers[0] == answers[1]
    assert trace.lost is None


def test_a_traced_run_keeps_each_operation_with_its_line():
    """Operators, functions, reductions and conversions, under their names, in the innermost line of the user's file."""
    source = text_of(
        "y = x + 0.1\nw = np.exp(y)\nv = z.sum(axis=0)\nu = v.astype(np.float32)\nresult = np.where(u > 0, u, w)"
    )
    trace = itself(source, normals("float16"), "float16", "kernel.py")
    seen = [(operation.name, operation.place.line) for operation in trace.operations]
    assert seen == [("add", 6), ("exp", 7), ("sum", 8), ("astype", 9), ("greater", 10), ("where", 10)]
    assert {operation.place.file for operation in trace.operations} == {"kernel.py"}


def test_an_operation_that_writes_into_its_operand_is_kept_with_the_operand_from_before():
    """In place, in an emulated run and in one of its own."""
    source = kernel("S += dw")
    draws = normals("float16", steps=1)
    for run in (emulated, itself):
        (operation,) = run(source, draws, "float16", "kernel.py").operations
        trace = run(source, draws, "float16", "kernel.py")
        assert trace.values(operation.operands[0].keys[0]).tolist() == [1.0] * 64
        assert np.array_equal(trace.values(operation.results[0].keys[0]), (1 + draws[0].astype(np.float16)))


def test_names_for_numpy_are_put_back():
    """The module's names are exchanged for the call alone, also where it raises."""
    function = own_function(text_of("y = zeros(x.shape)\nresult = 1 / 0"))
    names = dict(function.function.__globals__)
    with pytest.raises(ZeroDivisionError):
        run_traced(function, np.zeros((2, 3)), STEP, trace=Trace(3))
    assert all(function.function.__globals__[name] is names[name] for name in ("np", "zeros"))


def test_rows_are_known_by_value_and_not_by_type():
    """float16 storage, a float32 carrier, one number for a row of it, any NaN; but 0 and -0 are two numbers."""
    trace = Trace(3)
    row = np.array([0.5, np.nan, 1.5])
    keys = {trace.keep(row.astype(kind)).keys for kind in (np.float16, np.float32, np.float64)}
    assert len(keys | {trace.keep(np.array([0.5, -np.nan, 1.5])).keys}) == 1
    assert trace.keep(np.ones((2, 3))).keys == trace.keep(1.0).keys * 2
    assert trace.keep(0.0).keys != trace.keep(-0.0).keys
    assert trace.keep("text") is None
    assert trace.keep(np.array([1j])) is None


def test_an_axis_of_the_paths_is_found_wherever_it_is():
    """Rows run along the paths whichever axis that is, and along each where two could be it."""
    trace = Trace(3, [2, 0])
    values = np.arange(6.0).reshape(2, 3)
    assert [trace.rows[key].tolist() for key in trace.keep(values).keys] == [[2.0, 0.0], [5.0, 3.0]]
    assert trace.keep(values.T.copy()).keys == trace.keep(values).keys
    assert len(trace.keep(np.arange(9.0).reshape(3, 3)).readings) == 2
    assert trace.keep(np.arange(4.0)).axis is None


def test_at_most_256_paths_are_kept():
    """The first of them by default; more, or none, are refused."""
    assert Trace(1000).kept.tolist() == list(range(256))
    for kept in ([], range(257)):
        with pytest.raises(ValueError, match=f"^{len(kept)} paths are to be kept; accepted: 1 to 256$"):
            Trace(1000, kept)


def test_constants_are_kept_as_they_meet_the_state():
    """Rounded to the format, numbers and arrays alike."""
    trace = Trace(4)
    setting = new_setting(arithmetic_named("float16"), trace)
    trace.met(setting, 0.1)
    trace.met(setting, np.array([0.3, 0.7]))
    wanted = [trace.keep(np.float16(0.1)), trace.keep(np.array([0.3, 0.7], np.float16))]
    assert all(trace.constants >= set(kept.keys) for kept in wanted)


@pytest.mark.parametrize(("limit", "value"), [("MOST_OPERATIONS", 10), ("MOST_ROWS", 12)])
def test_past_a_limit_nothing_is_located(monkeypatch, limit, value):
    """What lies past the limit is not kept, and the end of a trace is no difference: the text says how far it went."""
    same = LOW.replace("# here", "")
    late = [
        source.replace("return S", end)
        for source, end in ((same, "return S * S * 0.3"), (same, "return S * (S * 0.3)"))
    ]
    draws = normals("float16")
    monkeypatch.setattr(tracing, limit, value)
    pair = [emulated(source, draws, "float16", name) for source, name in zip(late, ("low.py", "c.py"), strict=True)]
    assert all(trace.full for trace in pair)
    found = first_difference(*pair, form=FORMATS["float16"])
    assert places(found) == [None, None]
    assert str(found) == f"not found within {len(pair[0].operations)} operations"


def test_a_difference_before_the_limit_is_still_located(monkeypatch):
    """And says of how many operations it is the first."""
    monkeypatch.setattr(tracing, "MOST_OPERATIONS", 16)
    pair = [
        emulated(source, normals("float16"), "float16", name) for source, name in ((LOW, "low.py"), (OTHER, "c.py"))
    ]
    found = first_difference(*pair, form=FORMATS["float16"])
    assert places(found) == [("low.py", 7), ("c.py", 7)]
    assert found.incomplete == "of the first 16 operations"


def test_where_the_traced_class_is_lost_no_line_is_blamed():
    """What is computed on a copy through bytes is not seen: the trace says where it comes back, and names no line."""
    lost = "H = {1}\nT, U = (np.frombuffer(one.tobytes(), one.dtype) for one in (S, dw))\nT = {0}\nS = T * dw  # here"
    beside = "S * dw * dw", "dw + dw"
    texts = zip(("T * T + U * T", "T * (T + U)"), beside, strict=True)
    low, other = (kernel(lost.format(*pair)) for pair in texts)
    draws = normals("float16")
    pair = [itself(source, draws, "float16", name) for source, name in ((low, "low.py"), (other, "c.py"))]
    found = first_difference(*pair, form=FORMATS["float16"])
    assert found.kind == "untraced"
    assert places(found) == [("low.py", marked(low)[0]), ("c.py", marked(other)[0])]
    assert found.incomplete == "the trace is incomplete: what is met at low.py:10 was computed out of its sight"


def test_a_list_of_numbers_that_was_computed_on_is_lost_and_one_that_was_not_is_known():
    """Numbers that go through a list and come back as they were are the rows that they were; others are lost."""
    for change, lost in (("", None), (" * 0.3", 7)):
        source = kernel(f"T = np.array([float(one){change} for one in S + dw], S.dtype)\nS = T * dw")
        trace = itself(source, normals("float16"), "float16", "kernel.py")
        assert (trace.lost and trace.lost[0].line) == lost
