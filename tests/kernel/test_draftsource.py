"""Drafted audit files: which source is read, without running it, and what is refused, word for word."""

from __future__ import annotations

import re
import sys
from pathlib import Path

import pytest

from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.draft import draft


def drafted(folder, source, name="kernel"):
    path = folder / "model.py"
    path.write_text(source, encoding="utf-8")
    return draft(f"{path}:{name}")


def refused(target):
    with pytest.raises(AuditFileError) as caught:
        draft(str(target))
    assert caught.value.exit_code == 2
    return str(caught.value)


class TestSource:
    def test_not_executed(self, tmp_path):
        """Nothing of the source runs: neither its statements nor its defaults nor its decorators."""
        mark = tmp_path / "mark"
        source = (
            f"open({str(mark)!r}, 'w')\n@open({str(mark)!r}, 'w')\n"
            f"def kernel(dW, h, a=open({str(mark)!r}, 'w')):\n    return dW\nraise SystemExit\n"
        )
        drafted(tmp_path, source)
        assert not mark.exists()

    @pytest.mark.parametrize(
        "source",
        [
            "if True:\n    x = 1\nelse:\n    def kernel(z, h): pass\n",
            "try:\n    import fast\nexcept ImportError:\n    def kernel(z, h): pass\n",
            "try:\n    pass\nfinally:\n    def kernel(z, h): pass\n",
            "with x:\n    def kernel(z, h): pass\n",
            "def kernel(dW, h): pass\ndef kernel(z, h): pass\n",
        ],
    )
    def test_found(self, tmp_path, source):
        """A function that importing may define is found, and the last definition counts."""
        assert 'takes = "normals"' in drafted(tmp_path, source)

    @pytest.mark.parametrize(
        "source",
        [
            "def kernel(z, h):\n    for a, b in z: pass\n    x = {sum}\n",
            "def kernel(z, h):\n    for a, b in z: pass\n    if h: pass\n{elifs}",
            "def kernel(z, h, a={sum}):\n    for a, b in z: pass\n",
            "if 0: pass\n{flat}\ndef kernel(z, h):\n    for a, b in z: pass\n",
        ],
    )
    def test_long_expressions(self, tmp_path, source):
        """Expressions and chains of more parts than Python recurses into do not stop the draft."""
        count = sys.getrecursionlimit()
        flat = "".join(f"elif x == {number}: pass\n" for number in range(count))
        elifs = "".join(f"    elif h == {number}: pass\n" for number in range(count))
        text = drafted(tmp_path, source.format(sum=" + ".join(["1"] * count), flat=flat, elifs=elifs))
        assert "factors = 2  # guessed from how z is taken apart; check" in text.splitlines()

    def test_declared_encoding(self, tmp_path):
        """A source is read in the encoding that it declares."""
        path = tmp_path / "model.py"
        path.write_bytes("# coding: latin-1\ndef kernel(dW, h, a='\xe9'): pass\n".encode("latin-1"))
        assert 'a = "\xe9"' in draft(f"{path}:kernel").splitlines()

    def test_warnings_of_the_source(self, tmp_path):
        """What Python would warn of in the source does not stop the draft."""
        assert 'a = "\\\\d"' in drafted(tmp_path, "def kernel(dW, h, a='\\d'): pass\n").splitlines()

    def test_relative_path(self, tmp_path, monkeypatch):
        """The path is kept as it was given."""
        monkeypatch.chdir(tmp_path)
        Path("model.py").write_text("def kernel(dW, h): pass\n")
        assert 'run = "model.py:kernel"' in draft("model.py:kernel")


class TestRefused:
    def test_no_file(self, tmp_path):
        """A file that is not there is refused in these words."""
        path = tmp_path / "none.py"
        assert refused(f"{path}:kernel") == f"{path}: there is no such file; accepted: the path of a Python file"

    def test_no_function(self, tmp_path):
        """A function that is not there is refused with those that are; methods and classes are none."""
        path = tmp_path / "model.py"
        path.write_text("def value(): pass\nclass Model:\n    def run(self): pass\ndef path(): pass\n")
        for name in ("run", "Model", "valeu"):
            message = f'{path}: there is no function "{name}" at the top level; accepted: value, path'
            assert refused(f"{path}:{name}") == message

    def test_no_functions(self, tmp_path):
        """A file without functions says what it would need."""
        path = tmp_path / "model.py"
        path.write_text("kernel = 1\n")
        assert refused(f"{path}:kernel") == (
            f'{path}: there is no function "kernel" at the top level; accepted: a file with a function at its top level'
        )

    def test_not_python(self, tmp_path):
        """A syntax error is refused with its line."""
        path = tmp_path / "model.py"
        path.write_text("x = 1\ndef kernel(dW, h:\n    pass\n")
        assert re.fullmatch(rf"{re.escape(str(path))}: line 2: this is not Python: .+", refused(f"{path}:kernel"))

    @pytest.mark.parametrize("data", [b"x = '\0'\n", b"# \xff\n", b"x = " + b"-" * 200_000 + b"1\n"])
    def test_not_text(self, tmp_path, data):
        """What Python's parser cannot even begin with, or gives up at, is refused and not a crash."""
        path = tmp_path / "model.py"
        path.write_bytes(data)
        assert refused(f"{path}:kernel").startswith(f"{path}: ")

    @pytest.mark.parametrize(
        ("target", "problem"),
        [
            ("model.py", '"model.py" does not end in ":" and the name of a function'),
            ("model.py:1", '"1" in "model.py:1" is not the name of a function'),
            ("package.module:kernel", '"package.module" is not a .py file'),
            ("notes.txt/:kernel", '"notes.txt/" in "notes.txt/:kernel" is neither a .py file nor the name of a module'),
        ],
    )
    def test_wrong_target(self, target, problem):
        """A target of another form is refused with the form."""
        assert refused(target) == f"{target}: {problem}; accepted: FILE.py:FUNCTION"
