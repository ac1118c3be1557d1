"""Values that are written down: texts read back, pickle, json, decimal, in the kernel's module and in others."""

from __future__ import annotations

import copy
import decimal
import fractions
import json
import logging
import math
import pickle
import struct

import numpy as np
import pytest
from kernel_runs import FILE, call, module_of, owned, same, unheld
from private_packages import copied, written

from narrowgauge.dispatch.exact import PICKLED
from narrowgauge.dispatch.scalar import Text
from narrowgauge.errors import DispatchError, EscapeError, RefusedError

DRAWS = np.array([0.2, 1.4, 0.75])
FLOAT = (
    "float(), or a store into a plain array, takes a value out of the emulated arithmetic; "
    "accepted: leave it as it is, arrays that the kernel's own module makes, and f-strings or %s for a text"
)
READ_BACK = (
    "a text that was made of the state becomes a number again, which nobody rounds; "
    "accepted: np.round for a number of digits"
)
DECIMAL = "decimal.Decimal takes a value out of the emulated arithmetic; accepted: leave it as it is"
NOT_OFFERED = "is not offered by this version on a value of the state"


def written_as_json(name):
    """The words for a function of json."""
    return f"json.{name} of the state writes what nobody rounds; accepted: return the state"


# one statement of a kernel, and the class and words of what it raises; `o` is this module's, which knows no state
CASES = {
    "float(str(x[0]))": (EscapeError, READ_BACK),
    "float(repr(x[0]))": (EscapeError, READ_BACK),
    "float(f'{x[0]:.3f}')": (EscapeError, READ_BACK),
    "float('{:.3f}'.format(x[0]))": (EscapeError, READ_BACK),
    "float('%s' % x[0])": (EscapeError, READ_BACK),
    "float(format(x[0], '.3e'))": (EscapeError, READ_BACK),
    "np.float64(str(x[0]))": (EscapeError, READ_BACK),
    "np.array([str(x[0]), '1'], float)": (EscapeError, READ_BACK),
    "json.dumps(x[0])": (RefusedError, written_as_json("dumps")),
    "json.dumps({'a': [1, (x,)]}, indent=1)": (RefusedError, written_as_json("dumps")),
    "json.dump(x > 1, None)": (RefusedError, written_as_json("dump")),
    "decimal.Decimal(x[0])": (EscapeError, DECIMAL),
    "decimal.Decimal(str(x[0]))": (EscapeError, DECIMAL),
    "decimal.Decimal.from_float(x[0])": (EscapeError, DECIMAL),
    "o.decimal.Decimal.from_float(x[0]) if False else o.math.sqrt(x[0])": (EscapeError, FLOAT),
    "o.fractions.Fraction(x[0])": (RefusedError, f".as_integer_ratio {NOT_OFFERED}"),
    "x[0].as_integer_ratio()": (RefusedError, f".as_integer_ratio {NOT_OFFERED}"),
    "x[0].hex()": (RefusedError, f".hex {NOT_OFFERED}"),
    "float.hex(float(x[0]))": (EscapeError, FLOAT),
    "struct.pack('d', x[0])": (EscapeError, FLOAT),
    "bytes(x)": (RefusedError, "bytes() is not offered by this version on a value of the state"),
    "o.math.exp(x[0])": (EscapeError, FLOAT),
    "o.math.ldexp(x[0], 2)": (EscapeError, FLOAT),
    "o.math.frexp(x[0])": (EscapeError, FLOAT),
    "o.math.modf(x[0])": (EscapeError, FLOAT),
    "o.math.isclose(x[0], 0.3)": (EscapeError, FLOAT),
    "o.math.dist([x[0]], [0.0])": (EscapeError, FLOAT),
    "o.pickle.dumps(x)": (RefusedError, PICKLED),
    "o.pickle.dumps([x[0]])": (RefusedError, PICKLED),
    "o.pickle.dumps(x > 1)": (RefusedError, PICKLED),
    "o.pickle._dumps(x)": (RefusedError, PICKLED),
}
OUTSIDE = (copy, decimal, fractions, json, logging, math, pickle, struct)
HEADER = "import decimal, json, math, pickle, struct\nimport numpy as np\n"


class Outside:
    """The real modules, as a module that is not copied has them."""

    def __init__(self):
        for module in OUTSIDE:
            setattr(self, module.__name__, module)


@pytest.mark.parametrize("form", ["float16", "float64"])
@pytest.mark.parametrize("statement", CASES)
def test_what_is_written_down_is_caught(statement, form):
    """Each way is of the stated class and in the stated words, with file and line, first in the list of faults."""
    kind, words = CASES[statement]
    module, setting = module_of(f"{HEADER}def kernel(x, o):\n    {statement}\n", form)
    with pytest.raises((DispatchError, ValueError, struct.error)):
        module.kernel(owned(DRAWS, setting), Outside())
    assert type(setting.faults[0]) is kind
    assert str(setting.faults[0]) == f"{FILE}:4: {words}"


def test_modules_that_know_no_runs_raise_where_nothing_can_be_noticed():
    """json and decimal of a module that is not copied ask a value for nothing: Python's own error, no number."""
    _, setting = module_of("", "float16")
    x = owned(DRAWS, setting)
    for write in (json.dumps, decimal.Decimal):
        with pytest.raises(TypeError):
            write(x[0])


@pytest.mark.parametrize("form", ["float16", "float64"])
def test_texts_are_texts(form):
    """What is printed, joined, looked up, logged, formatted again or written as JSON is a text like any other."""
    text = """
        import copy, json, pickle
        import numpy as np
        def kernel(x, log):
            s = f"{x[1]:.2f}"
            log.warning("%s %s", s, x[1])
            t = copy.deepcopy(s)
            return [s, str(x[0]), s + "!", "-".join([s, s]), {s: 1}["1.40"], f"{s:>8}", s.split("."), json.dumps([s]),
                    len(s), s == "1.40", pickle.loads(pickle.dumps(s)), t, int(f"{x[1]:.0f}"), s.isdigit(), sorted([s])]
    """
    log = logging.getLogger("narrowgauge.outlets")
    log.addHandler(logging.NullHandler())
    log.propagate = False
    plain, _, _ = call(text, None, DRAWS, log)
    found, setting, _ = call(text, form, DRAWS, log)
    assert setting.faults == []
    assert same(plain[0], found[0])
    assert same(plain[2:], found[2:])
    assert isinstance(found[0], Text)
    assert type(found[2]) is type(found[10]) is str


def test_a_text_is_read_back_where_nothing_can_be_noticed():
    """A text that Python or NumPy makes anew has lost its origin: the limit that the README states."""
    text = """
        import numpy as np
        def kernel(x):
            return float(" {:.2f}".format(x[1])), np.array(str(x[1])).astype(float)
    """
    result, setting, _ = call(text, "float16", DRAWS)
    assert setting.faults == []
    assert float(result[0]) == 1.4


PICKLED_INSIDE = """
    import copy, pickle, io
    from dataclasses import dataclass
    import numpy as np
    from helper import Model, double
    class Own:
        def __init__(self, x):
            self.x, self.first, self.mask, self.me, self.model = x, x[0], x > 1, self, Model(x)
    @dataclass
    class Row:
        x: object
        call: object = double
    def again(value):
        file = io.BytesIO()
        pickle.dump(value, file, protocol=4)
        file.seek(0)
        return pickle.load(file)
    def kernel(x):
        own, row = pickle.loads(pickle.dumps(Own(x))), again(Row(x[:2]))
        assert type(own) is Own and own.me is own and type(own.model) is Model and row.call is double
        other = copy.deepcopy(own)
        own.x[0] = 5.0
        return [own.x, own.first, own.mask, own.model.step(), row.x, row.call(row.x), other.x, x]
"""


@pytest.mark.parametrize("form", [None, "float64", "float16", "bfloat16"])
def test_pickling_inside_one_run(tmp_path, form):
    """Values of the state, and objects of copied classes, come back as what they were, apart from the original."""
    helper = "class Model:\n    def __init__(self, x): self.x = x\n    def step(self): return self.x / 3\n"
    written(tmp_path, {"kernel.py": PICKLED_INSIDE, "helper.py": helper + "def double(x): return 2 * x\n"})
    module, copies = copied(tmp_path, form, ["helper"])
    found = module.kernel(owned(DRAWS, copies.setting))
    if form is None:
        assert found[0].tolist() == [5.0, 1.4, 0.75]
        assert found[7].tolist() == DRAWS.tolist()
        return
    assert copies.setting.faults == []
    assert unheld(found, copies.setting) == []
    plain = copied(tmp_path, None, ["helper"])[0].kernel(DRAWS.copy())
    assert same(plain, found) == (form == "float64")


def test_what_another_run_has_pickled_is_refused():
    """A value belongs to its run: unpickled in another one, or under plain NumPy, it is refused, with the line."""
    text = "import pickle\ndef kernel(x, data=None):\n    return pickle.loads(data) if data else pickle.dumps(x)\n"
    data, _, _ = call(text, "float16", DRAWS)
    for form, words in (
        ("float16", rf"^{FILE}:3: a value of another run is unpickled"),
        (None, "^a value of another run"),
    ):
        with pytest.raises(RefusedError, match=words):
            call(text, form, DRAWS, data)


@pytest.mark.parametrize("form", [None, "float16"])
def test_what_cannot_be_pickled_is_pythons_own_error(form):
    """A function inside a function is refused by pickle itself."""
    text = "import pickle\ndef kernel(x):\n    return pickle.dumps(lambda: x)\n"
    with pytest.raises((AttributeError, pickle.PicklingError), match="local object"):
        call(text, form, DRAWS)


@pytest.mark.parametrize("form", [None, "float64", "float16"])
def test_json_and_decimal_of_plain_data(form):
    """Parameters are written and read as ever, and Decimal is the type that it was."""
    text = """
        import decimal, json
        from decimal import Decimal
        def kernel(x):
            d = Decimal("0.1") + decimal.Decimal(3)
            assert isinstance(d, Decimal) and issubclass(type(d), Decimal) and not isinstance(1, Decimal)
            half = Decimal.from_float(0.5)
            return json.loads(json.dumps({"a": [1, 0.5]})), str(d), float(half), decimal.getcontext().prec
    """
    result, _, _ = call(text, form, DRAWS)
    assert result == ({"a": [1, 0.5]}, "3.1", 0.5, decimal.getcontext().prec)
