"""`%` on a text asks a value for a plain number only to write it down: that is text, whoever applies it."""

from __future__ import annotations

import contextlib
import logging

import numpy as np
import pytest
from kernel_runs import FILE, call
from test_dispatch_escapes import FLOAT
from test_dispatch_observer import Log

from narrowgauge.dispatch.texts import READ_BACK
from narrowgauge.errors import EscapeError

X = np.array([0.25, 1.375, 6.5])
HEADER = (
    "import logging, operator\nimport numpy as np\nTEXT = '%8.2f'\ndef kernel(x):\n    m, k = x > 1, (x > 0).sum()\n"
)
WRITTEN = [
    "'%.3f' % x[0]",
    "'%e|%g' % (x[0], x[1])",
    "'%d paths, mean %.3f of %s' % (k, x[0], x[1])",
    "'%d' % x[2]",
    "'%i' % m[0]",
    "'%.2f' % k",
    "'%(mean).3f' % {'mean': x[0]}",
    "b'%.3f' % x[0]",
    "TEXT % x[0]",
    "TEXT % x[:1].sum()",
    "'%s' % (TEXT % x[1])",
]


@pytest.mark.parametrize("form", ["float64", "float16"])
@pytest.mark.parametrize("expression", WRITTEN)
def test_a_percent_sign_writes_down_what_an_f_string_would(expression, form):
    """The text is plain code's, nothing is refused, and each value leaves as text, on its line."""
    log = Log()
    result, setting, _ = call(f"{HEADER}    return {expression}\n", form, X, observer=log)
    assert result == call(f"{HEADER}    return {expression}\n", None, X)[0]
    assert setting.faults == []
    assert set(log.ways) == {("text", 6)}
    assert log.decisions == 0


def test_a_text_that_is_written_in_place():
    """`text %= value` is the same."""
    log = Log()
    result, setting, _ = call(f"{HEADER}    t = TEXT\n    t %= x[1]\n    return t\n", "float16", X, observer=log)
    assert (result, setting.faults, log.ways) == ("    1.38", [], [("text", 7)])


def test_logging_writes_down_what_it_is_given(caplog, capsys):
    """The line of the kernel counts, the message is right, and logging has nothing to complain about."""
    log = Log()
    lines = "    logging.getLogger('kernel').warning('mean %.3f of %d, %s', x.mean(), k, x[1])\n    return x\n"
    with caplog.at_level(logging.WARNING):
        _, setting, _ = call(HEADER + lines, "float16", X, observer=log)
    assert caplog.text.endswith("mean 2.709 of 3, 1.375\n")
    assert "Logging error" not in capsys.readouterr().err
    assert setting.faults == []
    assert set(log.ways) == {("text", 6)}


@pytest.mark.parametrize(
    "expression",
    [
        "operator.mod('%.3f', x[0])",
        "'%.3f'.__mod__(x[0])",
        "'%.3f' % float(x[0])",
        "7 % float(x[0])",
        "float(x[0]) % 7",
    ],
)
def test_where_no_percent_sign_asks_it_is_an_escape(expression):
    """A call may do anything with the number, and the message names what is accepted."""
    with pytest.raises(EscapeError) as raised:
        call(f"{HEADER}    return {expression}\n", "float16", X)
    assert str(raised.value) == f"{FILE}:6: {FLOAT}"


@pytest.mark.parametrize(
    "expression",
    [
        "float('%.17g' % x[0])",
        "float(TEXT % x[0])",
        "float(('%.3f;' % x[0])[:-1].strip())",
        "np.float64('%.3f' % (x[0],))",
        "int('%d' % x[0])",
        "[0.1,\n        float(\n        '%s %.3f' % ('', x[0]))]",
    ],
)
def test_a_text_that_is_read_again_is_an_escape(expression):
    """float() and its like around the text would make a plain number of the state that nobody rounds."""
    with pytest.raises(EscapeError) as raised:
        call(f"{HEADER}    return {expression}\n", "float16", X)
    assert str(raised.value).partition(": ")[2] == READ_BACK


@pytest.mark.parametrize(
    "expression", ["print(float('0.5'), '%.3f' % x[0])", "float(len('%.3f' % x[0]))", "'%.3f' % x[0] + str(float(3))"]
)
def test_a_number_that_is_read_beside_the_text_is_none_of_the_state(expression, capsys):
    """Only a call around the text reads it; of float(len(text)) that cannot be told, so that it is refused."""
    refused = "len" in expression
    with pytest.raises(EscapeError) if refused else contextlib.nullcontext():
        call(f"{HEADER}    return {expression}\n", "float16", X)


@pytest.mark.parametrize(
    "expression",
    ["x[1] % 0.3", "7 % x[1]", "7.5 % x[1]", "x % 0.3", "np.linspace(0, 1, 3) % x", "k % 2", "divmod(x[1], 0.3)"],
)
def test_a_remainder_of_numbers_is_no_text(expression):
    """It is an operation of the format."""
    log = Log()
    _, setting, _ = call(f"{HEADER}    return {expression}\n", "float16", X, observer=log)
    assert (log.ways, setting.faults) == ([], [])
