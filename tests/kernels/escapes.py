"""Kernels that let the state out of its arithmetic, one way each: what is caught, at which line, in which words."""

from __future__ import annotations

from typing import NamedTuple

from narrowgauge.errors import DispatchError, EscapeError, RefusedError


class Escape(NamedTuple):
    """The statement that lets the state `x` out, the class and the words of the error, and where it is raised."""

    statement: str
    kind: type[DispatchError]
    words: str
    place: str = "kernel.py:5"


FLOAT = (
    "float(), or a store into a plain array, takes a value out of the emulated arithmetic; "
    "accepted: leave it as it is, arrays that the kernel's own module makes, and f-strings or %s for a text"
)
ARRAY = (
    "a function or a plain array that does not know the emulated arithmetic asked for plain numbers; "
    "accepted: NumPy functions called, and arrays made, in the kernel's own module, np.array(values) for a list "
    "of the state, a list for constants, and a @ x for a.dot(x) of a plain array a"
)
READ_BACK = (
    "a text that was made of the state becomes a number again, which nobody rounds; "
    "accepted: np.round for a number of digits"
)
NO_DRAWS = (
    "is not offered by this version: the kernel takes its random numbers as its first argument, "
    "so that every format sees the same"
)


def fixes(dtype: str) -> str:
    """The words for a buffer of another type."""
    return f"the kernel fixes dtype {dtype}; accepted: float64 or none, since the audit chooses the format"


# A module beside none of the kernel's, which no copy is made of: it has NumPy as it is.
FOREIGN = """
import math
import pickle
from decimal import Decimal
from json import dumps
import numpy as np
BUFFER = np.zeros(48)
CACHE = {}
def buffer(): return np.zeros(48)
def filled(x):
    out = np.empty(x.shape)
    out[:] = x
    return out
def looped(x): return sum(float(value) for value in x)
def listed(x): return np.array([value for value in x])
def tolist(x): return x.tolist()
def iterated(x): return math.fsum(x)
def stored(x):
    BUFFER[0] = x[0]
    return BUFFER
def asarray(x): return np.asarray(x, dtype=float) * 0.1
def written(x): return np.frombuffer(bytes(x))
def pickled(x): return pickle.loads(pickle.dumps(x))
def decimal(x): return Decimal(x)
def json(x): return dumps(x)
def memory(x): return np.asarray(memoryview(x))
def interface(x): return np.lib.stride_tricks.as_strided(np.array(x.__array_interface__), (3,))
def pointer(x): return x.ctypes.data
def noise(n): return 0.1 * np.arange(1.0, n + 1.0)
def view(x): return np.ndarray.view(x, np.ndarray)
"""
HEAD = "import numpy as np\nimport unlisted_tools as tools\ndef kernel(rng, h):\n    x = rng.standard_normal(48)\n    "

ESCAPES = {
    "a plain buffer of a foreign module is filled": Escape("b = tools.buffer(); b[:] = x", EscapeError, ARRAY),
    "a plain buffer of a foreign module is added to": Escape(
        "b = tools.buffer(); b += x",
        EscapeError,
        "out= of np.add is a plain array; accepted: an array of the state",
    ),
    "one value is stored into a plain buffer": Escape("b = tools.buffer(); b[3] = x[3]", EscapeError, FLOAT),
    "a foreign module fills its own buffer": Escape("return tools.filled(x)", EscapeError, ARRAY),
    "a foreign module keeps one value": Escape("tools.stored(x)", EscapeError, FLOAT),
    "float()": Escape("return np.full(48, float(x[0]))", EscapeError, FLOAT),
    "float() in a foreign loop": Escape("return np.full(48, tools.looped(x))", EscapeError, FLOAT),
    "a format of text": Escape("return np.full(48, float('%.17g' % x[0]))", EscapeError, READ_BACK),
    "__array__ by foreign code": Escape("return tools.asarray(x)", EscapeError, ARRAY),
    "a list made an array by foreign code": Escape("return tools.listed(x)", EscapeError, ARRAY),
    "iteration by a compiled function": Escape("return np.full(48, tools.iterated(x))", EscapeError, FLOAT),
    "tolist, then a plain array by foreign code": Escape("return tools.listed(x.tolist())", EscapeError, ARRAY),
    "scipy outside stats and special": Escape(
        "from scipy.ndimage import gaussian_filter1d as f; return f(x, 1.0)", EscapeError, ARRAY
    ),
    "scipy.linalg": Escape("import scipy.linalg as s; return s.toeplitz(x)[0]", EscapeError, ARRAY),
    "pandas": Escape("import pandas as pd; return pd.DataFrame({'x': x})['x'].to_numpy()", EscapeError, ARRAY),
    "Python's random": Escape("import random; x = x + random.gauss(0, 1)", RefusedError, f"random.gauss {NO_DRAWS}"),
    "a generator of Python's": Escape(
        "from random import Random; Random(3).gauss(0, 1)", RefusedError, f"Random.gauss {NO_DRAWS}"
    ),
    "a store of plain floats": Escape(
        "x[:] = tools.noise(48)",
        EscapeError,
        "a plain float array is stored whose values {form} does not have; "
        "accepted: np.asarray(values), which rounds constants",
    ),
    "swallowed": Escape(
        "\n    try:\n        return tools.asarray(x)\n    except Exception:\n        return x",
        EscapeError,
        ARRAY,
        "kernel.py:7",
    ),
    "a buffer of 32 bits": Escape("return np.zeros(48, np.float32) + x", RefusedError, fixes("float32")),
    "a cast to 16 bits": Escape("return x.astype(np.float16)", RefusedError, fixes("float16")),
    "a buffer of complex numbers": Escape("z = np.zeros(24, complex)", RefusedError, fixes("complex128")),
    "a complex view": Escape(
        "return x.view(complex).real", RefusedError, ".view is not offered by this version on a value of the state"
    ),
    "a Fourier transform": Escape(
        "return np.fft.fft(x).real",
        RefusedError,
        "np.fft.fft is refused: it gives complex numbers, which no format holds; accepted: a kernel of real numbers",
    ),
    "bytes of a generator": Escape(
        "rng.bytes(3)",
        RefusedError,
        "Generator.bytes is not offered by this version: bytes are no random input of a path; accepted: integers",
    ),
    "a table of objects made numbers": Escape(
        "b = np.empty(2, object); b[0] = x[0]; b[1] = x[1]; return b.astype(float)", EscapeError, FLOAT
    ),
    "a pointer": Escape(
        "return tools.pointer(x)", RefusedError, ".ctypes is not offered by this version on a value of the state"
    ),
    "complex functions": Escape(
        "import cmath; return cmath.exp(x[0]).real",
        RefusedError,
        "cmath.exp of the state gives complex numbers, which no format holds; accepted: a kernel of real numbers",
    ),
    "array": Escape("import array; return array.array('d', x)", EscapeError, FLOAT),
    "a ratio": Escape(
        "import fractions; return fractions.Fraction(x[0])",
        EscapeError,
        "fractions.Fraction takes a value out of the emulated arithmetic; accepted: leave it as it is",
    ),
    "a decimal number": Escape(
        "import decimal; return decimal.Decimal(x[0])",
        EscapeError,
        "decimal.Decimal takes a value out of the emulated arithmetic; accepted: leave it as it is",
    ),
    "bytes of a struct": Escape("import struct; return struct.pack('d', x[0])", EscapeError, FLOAT),
    "JSON": Escape(
        "import json; return json.dumps([x])",
        RefusedError,
        "json.dumps of the state writes what nobody rounds; accepted: return the state",
    ),
    "pickled by a foreign module": Escape(
        "return tools.pickled(x)",
        RefusedError,
        "a value of the state is pickled where its run is not known; accepted: copy.deepcopy, or pickle imported in "
        "the kernel's own module",
    ),
    "bytes by a foreign module": Escape(
        "return tools.written(x)",
        RefusedError,
        "bytes() is not offered by this version on a value of the state",
    ),
    "text and back": Escape("return np.full(48, float(f'{x[0]:.6f}'))", EscapeError, READ_BACK),
    "hexadecimal digits": Escape(
        "return x[0].hex()", RefusedError, ".hex is not offered by this version on a value of the state"
    ),
}

# Ways out that Python or NumPy closes by itself: what it says, with the line in the traceback.
CLOSED = {
    "return tools.memory(x)": (TypeError, "memoryview: a bytes-like object is required, not 'Array'"),
    "return tools.interface(x)": (AttributeError, "'ndarray' object has no attribute '__array_interface__'"),
    "return tools.view(x)": (
        TypeError,
        "descriptor 'view' for 'numpy.ndarray' objects doesn't apply to a 'Array' object",
    ),
    "return tools.decimal(x[0])": (TypeError, "conversion from Scalar to Decimal is not supported"),
    "return tools.json(x[0])": (TypeError, "Object of type float64 is not JSON serializable"),
}
