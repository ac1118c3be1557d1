"""Drafted audit files: what is read from a kernel's source, and that the draft can be read at once."""

from __future__ import annotations

import inspect
import re

import msgspec
import numpy as np
import pytest
from auditfile_cases import LEAST, read
from hypothesis import given
from hypothesis import strategies as st

from narrowgauge.kernel import draft as draft_module
from narrowgauge.kernel.audittables import RULES
from narrowgauge.kernel.draft import draft

# [library] and [command] are for kernels that are no function in a Python file; [domain] needs a parameter to vary.
DRAFTED = sorted(key for key in RULES if key.partition(".")[0] not in ("library", "command", "domain"))
GATE = ("policy.file", "gate.stale", "gate.paths", "gate.most_paths", "gate.watch")

HESTON = '''"""Two factors, every kind of default."""

import numpy as np

LIMIT = 3.0


def heston(dW, h, *, spot=100.0, strikes=(90, 100.0), kind="call", floor=True, rho, cap=LIMIT, table=None):
    s = np.full(dW.shape[-1], spot)
    v = np.full(dW.shape[-1], 0.04)
    for a, b in dW:
        b = rho * a + np.sqrt(1 - rho**2) * b
        s = s + s * np.sqrt(np.maximum(v, 0)) * a
        v = v + (0.04 - v) * h + 0.3 * np.sqrt(np.maximum(v, 0)) * b
    return np.maximum(s - strikes[0], 0)
'''
HESTON_DRAFT = """\
# Audit file for heston, drafted from its source: check what is guessed, and supply what is to be
# filled in. A key behind a # is optional and shows its default.

[kernel]
# Called as heston(dW, h, **parameters); h is the step size.
run = "{file}:heston"  # file and function; the path is relative to the folder of this file
takes = "increments"  # by the name of dW; increments, normals, uniforms or rng
factors = 2  # guessed from how dW is taken apart; check
# layout = "steps, factors, paths"  # order of the axes of the array of draws; without paths, one path a call
# coupling = "sum"  # "none": levels are measured without their differences
# modules = []  # further modules and packages whose NumPy is rounded
# shared = []  # modules of theirs that cannot be copied, run as they are and not rounded
# allow = []  # lines such as "model.py:41" where values may leave and go on unrounded
# rounds = "emulated"  # "itself": not emulated; the kernel gets its draws in the format's own type

[parameters]
# Passed to the kernel by keyword; arrays of numbers arrive as float64 NumPy arrays.
spot = 100.0
strikes = [90, 100.0]
kind = "call"
floor = true
# rho = ...  # no default in the signature: fill in
# cap = ...  # default in the signature: LIMIT; fill in, or leave out
# table = ...  # default in the signature: None; fill in, or leave out

[ladder]
horizon = 1.0  # time that a path covers; fill in
# coarsest_steps = 1  # steps of a path on level 0
# refinement = 2  # factor from the steps of a level to those of the next
finest = 8  # last level, the first is 0; fill in

# [target]
"""


def drafted(folder, source, name="kernel"):
    path = folder / "model.py"
    path.write_text(source, encoding="utf-8")
    return draft(f"{path}:{name}")


def signature(folder, arguments, body="return dW"):
    return drafted(folder, f"def kernel({arguments}):\n    {body}\n")


def lines_with(text, start):
    return [line for line in text.splitlines() if line.startswith(start)]


def uncommented(text):
    """A draft in which every optional key and table is switched on."""
    return re.sub(r"^# (?=\[\w+\]$|\w+ = (?!\.\.\.))", "", text, flags=re.MULTILINE)


def as_lists(value):
    return [as_lists(element) for element in value] if isinstance(value, tuple | list) else value


class TestText:
    def test_word_for_word(self, tmp_path):
        """The part that depends on the kernel reads exactly so."""
        text = drafted(tmp_path, HESTON, "heston")
        assert text.startswith(HESTON_DRAFT.format(file=(tmp_path / "model.py").as_posix()))

    def test_filled_in(self, tmp_path):
        """With its placeholders filled the draft is an audit file, and its parameters run the kernel."""
        text = drafted(tmp_path, HESTON, "heston")
        text = text.replace("# rho = ...", "rho = -0.5").replace("# cap = ...", "cap = 3.0")
        audit_file = read(tmp_path, text)
        space = {}
        exec(HESTON, space)
        draws = np.zeros((4, audit_file.kernel.factors, 7))
        assert space["heston"](draws, 0.25, **audit_file.keywords()).tolist() == [10.0] * 7

    def test_read_at_once(self, tmp_path):
        """When every parameter has a default, the draft is an audit file as it is."""
        audit_file = read(tmp_path, signature(tmp_path, "dW, h, spot=1.0, *, rate=0.05"))
        assert audit_file.kernel.run == f"{(tmp_path / 'model.py').as_posix()}:kernel"
        assert audit_file.keywords() == {"spot": 1.0, "rate": 0.05}
        assert audit_file.ladder.finest == 8

    def test_defaults_shown_are_the_defaults(self, tmp_path):
        """With every comment switched on nothing is assumed, and all but the examples is as it was."""
        text = signature(tmp_path, "dW, h")
        full, plain = read(tmp_path, uncommented(text)), read(tmp_path, text)
        assert full.assumed == ()
        assert (full.kernel, full.ladder, full.formats, full.sampling) == (
            plain.kernel,
            plain.ladder,
            plain.formats,
            plain.sampling,
        )
        assert full.cost == msgspec.structs.replace(plain.cost, approximate_draws=plain.cost.draws)
        assert (full.draws.approximate, full.draws.cells) == ("constant", 1024)
        assert full.draws.formats == plain.formats.narrow
        least = read(tmp_path, LEAST)
        assert plain.assumed == least.assumed
        assert (full.target.bias_share, full.target.worthwhile) == (0.25, least.worthwhile)

    def test_every_key_has_a_meaning(self):
        """Each key of the audit file has its one line, and no line is left over."""
        assert sorted(draft_module.MEANINGS) == [key for key in DRAFTED if not key.startswith("lines.")]
        assert all(0 < len(meaning) < 80 for meaning in draft_module.MEANINGS.values())

    def test_every_key_is_there_once(self, tmp_path):
        """Each key of the audit file stands in its table of the draft once."""
        table, keys = "", []
        for line in signature(tmp_path, "dW, h").splitlines():
            if match := re.fullmatch(r"(?:# )?\[(\w+)\]", line):
                table = match[1]
            elif match := re.match(r"(?:# ){0,2}(\w+) = ", line):
                keys.append(f"{table}.{match[1]}")
        assert sorted(keys) == sorted([*DRAFTED, *GATE])

    @pytest.mark.parametrize("name", ["u", "rng"])
    def test_no_approximate_normals_where_none_are_taken(self, tmp_path, name):
        """For a kernel of uniforms, or one that draws for itself, the keys that would be refused are left out."""
        text = uncommented(signature(tmp_path, f"{name}, h", "return 0"))
        assert "[draws]" not in text
        assert "approximate_draws = " not in text
        assert read(tmp_path, text).draws is None


class TestTakes:
    @pytest.mark.parametrize(
        ("name", "takes"),
        [
            *((name, "increments") for name in ("dW", "dw", "dB", "increments", "noise_increments", "dW1")),
            *((name, "normals") for name in ("z", "Z", "normals", "xi", "eps", "standard_normals")),
            *((name, "uniforms") for name in ("u", "U", "uniforms")),
        ],
    )
    def test_known_names(self, tmp_path, name, takes):
        """What the first argument is called says what the kernel takes."""
        text = signature(tmp_path, f"{name}, h", "return 0")
        line = f'takes = "{takes}"  # by the name of {name}; increments, normals, uniforms or rng'
        assert lines_with(text, "takes") == [line]

    @pytest.mark.parametrize("name", ["x", "noise", "drawn", "zeta", "unit", "window"])
    def test_unknown_names(self, tmp_path, name):
        """A name that says nothing is taken for increments, with a remark."""
        text = signature(tmp_path, f"{name}, h", "return 0")
        assert lines_with(text, "takes") == ['takes = "increments"  # guessed; check']

    @pytest.mark.parametrize("name", ["rng", "generator", "random_state"])
    def test_generators(self, tmp_path, name):
        """A generator says that the kernel draws for itself: factors and layout are not asked for."""
        text = signature(tmp_path, f"{name}, h, *, steps, paths, s=0.2", "return 0")
        assert "(" + f"{name}, h, steps=..., paths=..., **parameters); h is the step size." in text
        assert lines_with(text, "takes") == ['takes = "rng"  # as it takes paths; increments, normals, uniforms or rng']
        assert read(tmp_path, text).kernel.takes == "rng"
        assert read(tmp_path, text).parameters == {"s": 0.2}
        assert not lines_with(text, "factors")
        assert not lines_with(text, "layout")

    def test_a_generator_alone(self, tmp_path):
        """A kernel that cannot be told how many paths to run needs an adapter, and the draft says so."""
        text = signature(tmp_path, "rng, h, s=0.2", "return 0")
        assert 'takes = "rng"  # by the name of rng; increments, normals, uniforms or rng' in text
        assert "takes no number of paths: write an adapter that does, and name it in run.\n" in text

    def test_paths_are_asked_for(self, tmp_path):
        """A kernel that leaves its first argument be, and asks for the number of paths, draws for itself."""
        text = signature(tmp_path, "_, h, paths, s=0.2", "return 0")
        assert read(tmp_path, text).kernel.takes == "rng"


class TestFactors:
    @pytest.mark.parametrize(
        ("body", "factors", "layout"),
        [
            ("for a, b in dW: pass", 2, "steps, factors, paths"),
            ("for (a, b, c) in dW: pass", 3, "steps, factors, paths"),
            ("for i, (a, b) in enumerate(dW): pass", 2, "steps, factors, paths"),
            ("for t, (a, b) in zip(times, dW): pass", 2, "steps, factors, paths"),
            ("return sum(a * b for a, b in dW)", 2, "steps, factors, paths"),
            ("for i in range(len(dW)): x = dW[i, 0] + dW[i, 1]", 2, "steps, factors, paths"),
            ("for i in range(len(dW)): x = dW[i][0] + dW[i][2]", 3, "steps, factors, paths"),
            ("for i in range(len(dW)): a, b = dW[i]", 2, "steps, factors, paths"),
            ("for row in dW: x = row[1]", 2, "steps, factors, paths"),
            ("for row in dW: x = row[1, :]", 2, "steps, factors, paths"),
            ("for row in dW: a, b = row", 2, "steps, factors, paths"),
            ("row = dW[h]; return row[3]", 4, "steps, factors, paths"),
            ("w = dW; return w[:, 1]", 2, "steps, factors, paths"),
            ("return dW[:, 0, :] + dW[:, 1, :]", 2, "steps, factors, paths"),
            ("return dW[0, 1]", 2, "steps, factors, paths"),
            ("a, b = dW", 2, "factors, steps, paths"),
            ("return dW[0] + dW[1]", 2, "factors, steps, paths"),
            ("return dW[1, :, :]", 2, "factors, steps, paths"),
            ("return dW[..., 1]", 2, "steps, paths, factors"),
            ("return dW[:, :, 2]", 3, "steps, paths, factors"),
        ],
    )
    def test_shown_by_the_source(self, tmp_path, body, factors, layout):
        """How the draws are taken apart says how many there are a step, and on which axis."""
        text = signature(tmp_path, "dW, h", body)
        kernel = read(tmp_path, text).kernel
        assert (kernel.factors, kernel.layout) == (factors, layout)
        assert lines_with(text, "factors") == [f"factors = {factors}  # guessed from how dW is taken apart; check"]
        assert len(lines_with(text, "layout")) == (layout != "steps, factors, paths")

    @pytest.mark.parametrize(
        "body",
        [
            "for dw in dW: pass",
            "for i in range(len(dW)): x = dW[i]",
            "for dw in dW[1:]: pass",
            "x = dW[0] + dW[1]\n    for i in range(len(dW)): x += dW[i]",
            "steps, paths = dW.shape",
            "first, *rest = dW",
            "for a, b in other: pass",
            "for a, b in pairs(dW): pass",
            "x = dW[True, -1]",
            "x = other[i, 1]",
            "x = dW[5000, 5000]",
        ],
    )
    def test_not_shown(self, tmp_path, body):
        """What tells nothing about factors leaves one, with a remark."""
        text = signature(tmp_path, "dW, h", body)
        kernel = read(tmp_path, text).kernel
        assert (kernel.factors, kernel.layout) == (1, "steps, paths")
        assert lines_with(text, "# factors") == ["# factors = 1  # draws per step; nothing in the source shows more"]

    def test_ladder_fits(self, tmp_path):
        """With many factors the drafted ladder ends where the smallest block still fits 2^22 draws."""
        audit_file = read(tmp_path, signature(tmp_path, "dW, h", "return dW[:, 99]"))
        assert audit_file.kernel.factors == 100
        assert 1024 * 100 * 2**audit_file.ladder.finest <= 2**22 < 1024 * 100 * 2 ** (audit_file.ladder.finest + 1)


class TestParameters:
    @given(
        st.recursive(
            st.booleans() | st.text() | st.integers(-(2**63), 2**63 - 1) | st.floats(allow_nan=False),
            lambda inner: st.lists(inner, max_size=3) | st.tuples(inner, inner),
            max_leaves=5,
        )
    )
    def test_literals(self, tmp_path_factory, value):
        """A default comes back as the value that Python itself gives it, or is left to be filled in."""
        folder = tmp_path_factory.getbasetemp()
        source = f"def kernel(dW, h, *, a={value!r}):\n    return dW\n"
        text = drafted(folder, source.replace("inf", "1e999"))
        keywords = read(folder, text).keywords()
        if lines_with(text, "# a = ..."):
            assert keywords == {}
            return
        space = {}
        exec(source.replace("inf", "1e999"), space)
        default = inspect.signature(space["kernel"]).parameters["a"].default
        if isinstance(default, tuple | list):
            array = keywords["a"].tolist() if isinstance(keywords["a"], np.ndarray) else keywords["a"]
            assert array == as_lists(default)
        else:
            assert (type(keywords["a"]), keywords["a"]) == (type(default), default)

    @pytest.mark.parametrize(
        ("argument", "line"),
        [
            ("a", "# a = ...  # no default in the signature: fill in"),
            ("a=None", "# a = ...  # default in the signature: None; fill in, or leave out"),
            ("a=1 / 3", "# a = ...  # default in the signature: 1 / 3; fill in, or leave out"),
            ("a=1e999", "# a = ...  # default in the signature: 1e309; fill in, or leave out"),
            ("a=2 ** 70", "# a = ...  # default in the signature: 2 ** 70; fill in, or leave out"),
            ("a={}", "# a = ...  # default in the signature: {}; fill in, or leave out"),
            ("a=[{}]", "# a = ...  # default in the signature: [{}]; fill in, or leave out"),
            ("a=(1, 'x')", "# a = ...  # default in the signature: (1, 'x'); fill in, or leave out"),
            ("a='\\ud800'", "# a = ...  # default in the signature: '\\ud800'; fill in, or leave out"),
            ("a=-0.5", "a = -0.5"),
            ("a=1e-05", "a = 1e-05"),
            ("a=False", "a = false"),
            ("a='\\x7f\"\\n'", 'a = "\\u007f\\"\\n"'),
            ("a=[[1, 2], [3, 4]]", "a = [[1, 2], [3, 4]]"),
            ("\N{GREEK SMALL LETTER SIGMA}=0.2", '"\N{GREEK SMALL LETTER SIGMA}" = 0.2'),
            # Python reads the micro sign in a source as the Greek letter, and so does the draft.
            ("\N{MICRO SIGN}=0.2", '"\N{GREEK SMALL LETTER MU}" = 0.2'),
        ],
    )
    def test_lines(self, tmp_path, argument, line):
        """Each kind of default has its line, and the draft is readable with it."""
        text = signature(tmp_path, f"dW, h, *, {argument}")
        assert line in text.splitlines()
        read(tmp_path, text)

    def test_order_and_kinds(self, tmp_path):
        """Arguments after the first two are listed as in the signature, whichever way they may be passed."""
        text = signature(tmp_path, "dW, h, a=1, b=2, *rest, c, d=4, **more")
        block = text[text.index("[parameters]") : text.index("[ladder]")].strip().splitlines()[2:]
        assert block == [
            "a = 1",
            "b = 2",
            "# c = ...  # no default in the signature: fill in",
            "d = 4",
            "# further names are accepted, in **more",
        ]

    def test_by_position_only(self, tmp_path):
        """An argument that cannot be passed by keyword is one for an adapter."""
        text = signature(tmp_path, "dW, h, a=1, /, b=2")
        assert "# a cannot be passed by keyword: the kernel needs an adapter" in text.splitlines()
        assert read(tmp_path, text).keywords() == {"b": 2}


class TestContract:
    @pytest.mark.parametrize("arguments", ["", "dW", "dW, *, h=1.0"])
    def test_too_few_arguments(self, tmp_path, arguments):
        """A function that does not take draws and step size by position needs an adapter."""
        text = signature(tmp_path, arguments, "return 0")
        expected = (
            "# kernel takes fewer than two arguments by position. A kernel is called with the\n"
            "# draws, the step size, and the parameters by keyword: write an adapter, and name it in run.\n"
        )
        assert expected in text
        read(tmp_path, text)

    @pytest.mark.parametrize(
        ("arguments", "call"),
        [
            ("dW, dt", "kernel(dW, dt, **parameters); dt is the step size."),
            ("dW, *rest", "kernel(dW, h, **parameters); h is the step size."),
            ("*all", "kernel(draws, h, **parameters); h is the step size."),
        ],
    )
    def test_call(self, tmp_path, arguments, call):
        """The draft shows how the function will be called."""
        assert f"# Called as {call}" in signature(tmp_path, arguments, "return 0").splitlines()

    def test_step_by_another_name(self, tmp_path):
        """A second argument that is not named like a step size is pointed out."""
        remark = "# That steps is the step size does not show in its name; check."
        assert remark in signature(tmp_path, "dW, steps").splitlines()
        assert not lines_with(signature(tmp_path, "dW, step_size"), "# That")
