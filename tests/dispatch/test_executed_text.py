"""Code that a kernel makes of text: eval, exec, compile, __import__, with names of its own or fresh ones."""

from __future__ import annotations

import numpy as np
import pytest
from kernel_runs import FILE, call, same, unheld

from narrowgauge.errors import EscapeError

DRAWS = np.array([0.2, 1.4, 0.75])
MADE = '"import numpy as np\\nv = np.zeros(3)\\nv[:] = np.exp(x) / 3\\n"'
FUNCTION = '"def f(x):\\n    from numpy import empty as e\\n    v = e(3)\\n    v[:] = x * 0.1\\n    return v\\n"'
# the body of a kernel; what it returns must be rounded operation by operation
ROUNDED = {
    "names of the stand-in": 'import numpy\n    return eval("np.exp(x) + np.full(3, 0.1)", {"np": numpy, "x": x})',
    "names of the kernel": 'return eval("np.zeros(3) + x / 3")',
    "fresh names": f'names = {{"x": x}}\n    exec({MADE}, names)\n    return names["v"]',
    "builtins by module": f'import builtins\n    g = {{"x": x, "__builtins__": builtins}}\n    exec({MADE}, g)\n'
    '    return g["v"]',
    "builtins by dictionary": f'g = {{"x": x, "__builtins__": __builtins__}}\n    exec({MADE}, g)\n    return g["v"]',
    "builtins' importer": 'import builtins\n    return builtins.__import__("numpy").full(3, 0.1) * x',
    "importer by name": 'm = __import__("numpy.linalg")\n    return m.zeros(3) + x / 3',
    "a function of a text": f'names = {{}}\n    exec({FUNCTION}, names)\n    return names["f"](x)',
    "compiled": 'code = compile("np.ones(3) * x / 3", "s", "eval")\n    return eval(code, {"np": np, "x": x})',
    "a new function": "import types\n    code = compile('import numpy as np\\nv = np.ones(3) * 0.1', 's', 'exec')\n"
    "    names = {}\n    types.FunctionType(code, names)()\n    return names['v'] * x",
    "a lambda": 'return eval("lambda a: np.sqrt(a) + np.ones(3) * 0.1", {"np": np})(x)',
    "by Python's table": 'import sys\n    return sys.modules["numpy"].full(3, 0.1) + x',
}


@pytest.mark.parametrize("form", ["float64", "float16", "bfloat16"])
@pytest.mark.parametrize("name", ROUNDED)
def test_code_of_a_text_meets_the_stand_ins(name, form):
    """Whatever builtins it is given, an import in it gets stand-ins, and what it computes is rounded."""
    text = f"import numpy as np\ndef kernel(x):\n    {ROUNDED[name]}\n"
    plain, _, _ = call(text, None, DRAWS)
    result, setting, _ = call(text, form, DRAWS)
    assert setting.faults == []
    assert isinstance(result, np.ndarray)
    assert unheld(result, setting) == []
    assert same(plain, result) == (form == "float64")


def test_an_escape_in_a_text_is_found_at_the_line_that_runs_it():
    """The place of a fault in such code is the kernel's line, since the text has no file."""
    text = "def kernel(x):\n    return eval('float(x[0])', {'x': x})\n"
    with pytest.raises(EscapeError, match=f"^{FILE}:2: float"):
        call(text, "float16", DRAWS)


REAL = "import runpy\ndef kernel(x, file):\n    f = runpy.run_path(file)['f']\n    return f(x)\n"


def test_code_that_python_runs_by_itself_has_numpy_as_it_is(tmp_path):
    """A file run by runpy is a module that is not listed: its buffers refuse the state, and plain results are told."""
    file = tmp_path / "other.py"
    file.write_text("import numpy as np\ndef f(x):\n    v = np.zeros(3)\n    v[:] = x\n    return v\n")
    with pytest.raises(EscapeError, match=f"^{FILE}:4: a function or a plain array"):
        call(REAL, "float16", DRAWS, str(file))
    file.write_text("import numpy as np\ndef f(x):\n    return np.full(3, 0.1)\n")
    result, setting, _ = call(REAL, "float16", DRAWS, str(file))
    assert len(unheld(result, setting)) == 1
