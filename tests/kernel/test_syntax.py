"""The fingerprint of syntax trees: what code says counts, what it looks like does not, on every version of Python."""

from __future__ import annotations

import ast
import json
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from narrowgauge.kernel import syntax
from narrowgauge.kernel.syntax import imported_names, syntax_digest

SOURCE = '''
"""A kernel."""
import numpy as np
from helper import shrink

LIMIT = 1.6


def value(dW, h, *, rate=0.05):
    """Return the end of a path."""
    x = np.full(dW.shape[1], 1.0)
    for dw in dW:
        x = x + (rate * h * x + shrink(x) * dw)  # one step
    return np.minimum(x, LIMIT)
'''
HELPER = "def shrink(x):\n    return 0.2 * x\n"

# Reformatted: other line breaks, quotes, brackets, blanks, comments and docstrings; names and numbers are the same.
REFORMATTED = """
# No docstring here.
import numpy as np; from helper import shrink
LIMIT = 1.60
def value(
    dW, h, *,
    rate = 5e-2,
):
    'Another one.'
    x = np.full((dW.shape[1]), 1.)
    for dw in dW: x = (x + (((rate*h)*x) + (shrink(x) * dw)))
    return np.minimum(x,
                      LIMIT)
"""

CORPUS = r'''
"doc"
from __future__ import annotations
import numpy as np, os.path
from . import x
async def f(a, /, b: int = 3, *c, d=None, **e) -> float:
    "doc"
    async with a as b, c: pass
    x: int = 1; y: int
    f"a{{b}}{x!r:>{w}.3}c" "d" rf"\d{y=}" f"" f"{x:}" f"{x:{y}a}{z}{{" f"{x:%H:%M}" f"{ x = !r}"
    match a:
        case {"k": [1, *_], **rest} | P(x=3) if y: return -1j
        case None | 1.5: yield
    try: pass
    except* E as e: raise E from e
    a[1:2, ..., *b]; lambda *a, k=1: (yield); {**a, 1: 2}; {*a}; "\ud800", b"\xff", 1e999, 0x1F, 10**3, u"kind"
    d = '\d'
    return [i async for i in x if y] and not z or (u := 3)
class K(B, metaclass=M):
    """doc"""
    @d
    def g(self): 'doc'
type = 1; match = 2
'''


def digest(source=SOURCE, helper=HELPER, name="value"):
    return syntax_digest(source.encode(), name, {"helper": helper.encode()})


class TestWhatCounts:
    @pytest.mark.parametrize(
        ("old", "new"),
        [
            ("1.6", "1.6000000000000003"),
            ("1.0)", "1)"),
            ("0.05", "0.06"),
            ("x + (", "x - ("),
            ("rate * h * x", "rate * (h * x)"),
            ("minimum", "maximum"),
            ("for dw in dW:", "for dw in dW[::-1]:"),
            ("shrink(x) * dw", "shrink(x, dw)"),
            ("rate=0.05", "rate: float = 0.05"),
            ("*, rate", "rate"),
            ("x = x + (", "x += ("),
            ("LIMIT = 1.6", "LIMIT = 1.6\nUNUSED = 0"),
            ("    x = np.full", "    x: float = np.full"),
            ("LIMIT)\n", 'LIMIT)\n    "no docstring"\n'),
        ],
    )
    def test_a_change_of_what_the_code_says(self, old, new):
        """A constant, its type, an operator, an order, a name, a signature: each changes the digest."""
        assert SOURCE.count(old) == 1
        assert digest(SOURCE.replace(old, new)) != digest()

    @pytest.mark.parametrize(
        "helper", ["def shrink(x):\n    return 0.3 * x\n", "def shrink(x):\n    return x * 0.2\n", ""]
    )
    def test_a_change_in_a_listed_module(self, helper):
        """A helper that is listed counts like the kernel's own file."""
        assert digest(helper=helper) != digest()

    def test_names(self):
        """Another function of the same file is another kernel, and so is the same text under another module's name."""
        assert digest(name="other") != digest()
        assert syntax_digest(SOURCE.encode(), "value", {"other": HELPER.encode()}) != digest()
        assert syntax_digest(SOURCE.encode(), "value", {}) != digest()

    @pytest.mark.parametrize(
        ("one", "other"),
        [
            ("x = 1", "x = True"),
            ("x = 0.0", "x = -0.0"),
            ("x = 'a'", "x = b'a'"),
            ("x = '1'", "x = 1"),
            ("x = 1j", "x = 1.0"),
            ("x = 0", "x = 0j"),
            ("x = None", "x = 'None'"),
            ("x = ...", "x = 'Ellipsis'"),
            ("x = 'end'", "x = end"),
            ("f(a, b)", "f((a, b))"),
            ("f'{x!r}'", "f'{x}'"),
            ("f'{x:.3}'", "f'{x:.4}'"),
            ("f'{x}a'", "f'a{x}'"),
            ("f'a'", "'a'"),
            ("x = 1\ny = 2", "y = 2\nx = 1"),
            ("if x: a\nb", "if x:\n a\n b"),
            ("from a import b", "from .a import b"),
            ("import a", "import a as b"),
            ("def f(a, /): 0", "def f(a): 0"),
            ("def f(*, a=1, b): 0", "def f(*, a, b=1): 0"),
            ("x[a:b]", "x[a::b]"),
            ("{**a}", "{a: a}"),
            ("async def f(): 0", "def f(): 0"),
            ("x = 'a\\nb'", "x = 'a\\r\\nb'"),
            (f"x = 0x{'f' * 5000}", f"x = 0x{'f' * 4999}e"),
        ],
    )
    def test_no_two_meanings_share_a_digest(self, one, other):
        """Types and exact values of constants, orders and nestings are told apart; huge integers have no limit."""
        assert digest(one) != digest(other)


class TestWhatDoesNot:
    def test_formatting(self):
        """Line breaks, quotes, redundant brackets, comments, docstrings and the spelling of a number do not count."""
        assert digest(REFORMATTED) == digest()

    @pytest.mark.parametrize(
        ("one", "other"),
        [
            ("x = 1_000", "x = 0x3e8"),
            ("x = 'ab'", "x = u'a' \"b\""),
            ("f'a{{b'f'c{x}'", "f'a{{' 'bc' f'{x}'"),
            ("class K:\n 'doc'\n x = 1", "class K:\n x = 1"),
            ("def f():\n '''A.'''\n return 1", "def f(): return 1"),
            ("x = 1  # type: int", "x = 1"),
            ("x = 1\r\ny = 2\r\n", "x = 1\ny = 2"),
            ("\ufeffx = 1", "x = 1"),
            ("x = (1,)", "x = 1,"),
        ],
    )
    def test_spelling(self, one, other):
        """Two spellings of one thing."""
        assert digest(one) == digest(other)

    def test_a_docstring_is_dropped_where_it_is_one(self):
        """A string elsewhere, and an f-string in the first place, are no docstrings."""
        assert digest("x = 1\n'a'") != digest("x = 1\n'b'")
        assert digest("f'a'") != digest("f'b'")

    @pytest.mark.parametrize("values", [["ab", None], ["a", "b", None], ["", "ab", "", None, ""]])
    def test_how_an_f_string_is_cut(self, values):
        """Versions of Python cut the plain text of an f-string differently; neither that nor an empty format counts."""
        name = ast.Name("x")
        for spec in (None, ast.JoinedStr([]), ast.JoinedStr([ast.Constant("")])):
            inner = ast.FormattedValue(name, -1, spec)
            tree = ast.JoinedStr([inner if value is None else ast.Constant(value) for value in values])
            expected = ast.JoinedStr([ast.Constant("ab"), ast.FormattedValue(name, -1)])
            assert list(syntax.tree_words(tree)) == list(syntax.tree_words(expected))


def nested(value):
    """A tree as nested tuples and lists, by a walk of its own."""
    if isinstance(value, ast.AST):
        fields = [(f".{field}", nested(inside)) for field, inside in syntax._fields(value)]
        constant = isinstance(value, ast.Constant)
        return ("Constant", syntax._constant(value.value)) if constant else (type(value).__name__, fields)
    return [nested(one) for one in value] if isinstance(value, list) else syntax._constant(value)


def rebuilt(words):
    """What `nested` gives, from the words alone, which are used up."""
    word = words.pop(0)
    if word.startswith("list "):
        return [rebuilt(words) for _ in range(int(word.removeprefix("list ")))]
    if word == "Constant":
        return (word, words.pop(0))
    if " " in word:
        return word
    fields = []
    while words[0] != "end":
        fields.append((words.pop(0), rebuilt(words)))
    words.pop(0)
    return (word, fields)


@pytest.mark.parametrize("text", [SOURCE, CORPUS, Path(syntax.__file__).read_text("utf-8")])
def test_the_words_hold_the_whole_tree(text):
    """A tree can be built again from its words, so that no two trees have the same: but for what does not count."""
    tree = syntax._parsed(text.encode())
    words = list(syntax.tree_words(tree))
    assert rebuilt(words) == nested(tree)
    assert not words


class TestAnySource:
    def test_what_is_no_python_counts_by_its_bytes(self):
        """A listed package may hold a file that this version does not take; it counts, and stops nothing."""
        for text in ("def f(:", "x = 1\x00", "(" * 100_000):
            assert digest(helper=text) != digest(helper=f"{text} ")
            assert digest(helper=text) == digest(helper=text)

    def test_depth(self):
        """A sum of as many terms as the parser takes is walked without recursion."""
        tree = ast.Constant(1)
        for _ in range(50_000):
            tree = ast.BinOp(tree, ast.Add(), ast.Constant(1))
        words = list(syntax.tree_words(tree))
        assert len([word for word in words if word == "BinOp"]) == 50_000
        while isinstance(tree, ast.BinOp):  # taken apart, since Python's own clean-up of it recurses
            tree.left, tree = None, tree.left

    def test_a_warning_stays_inside(self, recwarn):
        """A doubtful escape in the user's string is the user's affair."""
        digest(r"x = '\d'")
        assert not recwarn.list

    def test_imports(self):
        """Top-level names, without the standard library and relative ones; also inside functions."""
        lines = [
            "import numpy.linalg as la, math",
            "from . import x",
            "from .y import z",
            "def f():",
            " import scipy.stats",
        ]
        assert imported_names("\n".join(lines).encode()) == {"numpy", "scipy"}
        assert imported_names(b"def f(:") == set()


def pythons():
    """Every Python from 3.11 on beside the running one, by its program; at least the running one itself."""
    beside = sorted(Path(sys.base_prefix).parent.glob("*/bin/python3"))
    named = [program for minor in range(11, 20) if (program := shutil.which(f"python3.{minor}")) is not None]
    found = {sys.executable: sys.version_info[:2]}
    for program in [*beside, *named]:
        code = "import sys; print(*sys.version_info[:2])"
        done = subprocess.run([program, "-I", "-c", code], check=False, capture_output=True, text=True)
        if done.returncode == 0 and (version := tuple(map(int, done.stdout.split()))) >= (3, 11):
            found[str(program)] = version
    return found


def test_every_python_gives_the_same_digest():
    """The module runs alone, without a package beside it, on each Python that is there, and gives the same digests."""
    texts = [
        SOURCE,
        HELPER,
        CORPUS,
        *(path.read_text("utf-8") for path in sorted(Path(syntax.__file__).parent.glob("*.py"))),
    ]
    code = (
        "import importlib.util, json, sys\n"
        f"spec = importlib.util.spec_from_file_location('syntax', {syntax.__file__!r})\n"
        "module = importlib.util.module_from_spec(spec); spec.loader.exec_module(module)\n"
        "texts = [text.encode('utf-8', 'surrogatepass') for text in json.load(sys.stdin)]\n"
        "print(json.dumps([module.syntax_digest(text, 'value', {'a': text}) for text in texts]))"
    )
    found = {}
    for program in pythons():
        done = subprocess.run(
            [program, "-I", "-W", "error", "-c", code],
            check=False,
            capture_output=True,
            text=True,
            input=json.dumps(texts),
        )
        assert done.returncode == 0, done.stderr
        found[program] = json.loads(done.stdout)
    assert found[sys.executable] == [syntax_digest(text.encode(), "value", {"a": text.encode()}) for text in texts]
    assert all(one == found[sys.executable] for one in found.values()), list(found)
