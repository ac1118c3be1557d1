"""Lines where the audit file lets values leave: there they leave as plain float64 and are seen, elsewhere not."""

from __future__ import annotations

import numpy as np
import pytest
from kernel_runs import FILE, module_of, owned, same
from test_dispatch_observer import Log

from narrowgauge.dispatch.setting import Place
from narrowgauge.errors import EscapeError

HEADER = "import math\nimport numpy as np\nimport scipy.linalg\n\ndef kernel(x):\n"
LINE = 6
DRAWS = np.array([0.3, 1.4, 0.75])

# statements that give `y`, plain
ESCAPES = (
    "y = float(x[0])",
    "y = complex(x[0])",
    "y = float('%.3f'.__mod__(x[0]))",
    "y = float('%.3f' % x[0])",
    "y = float(x[0] > 0.5)",
    "y = np.float64(x[0])",
    "y = REAL.asarray(x)",
    "y = REAL.asarray(x, np.float32)",
    "y = REAL.asarray(x > 0.5)",
    "y = REAL.array([x[0], x[1], 0.1])",
    "y = np.linspace(0, 1, 3).dot(x)",
    "y = scipy.linalg.norm(x)",
    "y = np.linspace(0, 1, 3); y[0] = x[0]",
    "y = np.linspace(0, 1, 3); y[:] = x",
    "y = np.linspace(0, 1, 3); y[0] = x[0] > 0.5",
    "y = np.arange(3); y[0] = np.sum(x > 0.5)",
)


def run(body, form, lines=(LINE,)):
    """The result of a kernel's lines, the first of which is LINE, on draws; its setting and the log of its observer."""
    log = Log()
    text = HEADER + "".join(f"    {line}\n" for line in body.split("\n"))
    module, setting = module_of(text, form, log if form else None)
    module.REAL = np
    if setting is not None:
        setting.allowed = frozenset(Place(FILE, line).resolved() for line in lines)
    return module.kernel(owned(DRAWS, setting)), setting, log


@pytest.mark.parametrize("statement", ESCAPES)
def test_on_an_allowed_line_a_plain_value_leaves(statement):
    """It is what plain code makes of the rounded values; no fault is kept, and the observer is told of the line."""
    result, setting, log = run(f"{statement}\nreturn y", "float16")
    rounded = HEADER + f"    {statement}\n    return y\n"
    plain, _ = module_of(rounded, None)
    plain.REAL = np
    assert same(plain.kernel(DRAWS.astype(np.float16).astype(np.float64)), result)
    assert setting.faults == []
    assert set(log.ways) == {("escape", LINE)}


@pytest.mark.parametrize("statement", ESCAPES)
def test_float64_has_the_bits_of_plain_code(statement):
    """What goes on with the plain value, and meets the state again, has plain NumPy's bits."""
    body = f"{statement}\nreturn np.sum(y.real * 1.1 + x) if type(y) is complex else np.sum(y * 1.1 + x)"
    plain, _, _ = run(body, None)
    result, setting, _ = run(body, "float64")
    assert same(plain, result)
    assert setting.faults == []


@pytest.mark.parametrize("statement", ESCAPES)
def test_on_any_other_line_it_is_caught(statement):
    """Negative control: the line below the allowed one is not allowed."""
    log = Log()
    module, setting = module_of(f"{HEADER}    pass\n    {statement}\n", "float16", log)
    module.REAL, setting.allowed = np, frozenset({Place(FILE, LINE).resolved()})
    with pytest.raises((EscapeError, TypeError, ValueError)):  # NumPy turns some errors into its own
        module.kernel(owned(DRAWS, setting))
    assert type(setting.faults[0]) is EscapeError
    assert str(setting.faults[0]).startswith(f"{FILE}:{LINE + 1}: ")
    assert log.ways == []


def test_what_left_goes_on_unrounded_and_is_rounded_when_it_meets_the_state():
    """1 / 3 in float64 is no number of float16; its product with the state is of the rounded one."""
    result, _, _ = run("y = float(x[0]) / 3\nreturn y, y * x", "float16")
    third = float(np.float16(0.3)) / 3
    assert result[0] == third
    assert third != float(np.float16(third))
    expected = np.float16(third) * DRAWS.astype(np.float16)
    assert np.array_equal(result[1]._carrier, expected.astype(np.float32))


def test_a_plain_array_comes_back_into_a_buffer_on_an_allowed_line_only():
    """There it is rounded as constants are; elsewhere the store is an escape."""
    store = "x[:] = np.linspace(0.1, 0.3, 3)"
    result, setting, log = run(f"{store}\nreturn x", "float16")
    assert np.array_equal(result._carrier, np.linspace(0.1, 0.3, 3).astype(np.float16).astype(np.float32))
    assert setting.faults == []
    assert log.ways == [("escape", LINE)]
    with pytest.raises(EscapeError):
        run(f"pass\n{store}", "float16")


def test_the_plain_array_is_a_copy():
    """Writing into what left does not reach the state, which must stay rounded; NumPy's copy=False is refused."""
    for form in ("float64", "float16"):
        result, _, _ = run("y = REAL.asarray(x)\ny[:] = 1 / 3\nreturn x", form)
        assert np.array_equal(result._carrier, owned(DRAWS, result._setting)._carrier)
    with pytest.raises(ValueError, match="only as a copy"):
        run("REAL.asarray(x, copy=False)", "float16")


def test_a_file_is_known_by_its_resolved_path(tmp_path, monkeypatch):
    """The line of a module that was compiled under a relative name, or reached through a link, is the same line."""
    monkeypatch.chdir(tmp_path)
    assert Place("kernel.py", 3).resolved() == Place(str(tmp_path.resolve() / "kernel.py"), 3)
    (tmp_path / "link.py").symlink_to(tmp_path / "kernel.py")
    assert Place("link.py", 3).resolved() == Place(str(tmp_path.resolve() / "kernel.py"), 3)
