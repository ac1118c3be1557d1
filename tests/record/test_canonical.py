"""Documents as text: what is written reads back equal, and what neither side accepts, word for word."""

from __future__ import annotations

import enum
import json
import math
import os
import struct
from collections import OrderedDict

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from narrowgauge.errors import NarrowgaugeError
from narrowgauge.record import canonical
from narrowgauge.record.canonical import DocumentError, canonical_text, read_strict, write_atomically

TEXTS = st.text(st.characters(exclude_categories=["Cs"]))
SCALARS = st.none() | st.booleans() | st.integers() | st.floats(allow_nan=False, allow_infinity=False) | TEXTS
DOCUMENTS = st.recursive(SCALARS, lambda inner: st.lists(inner) | st.dictionaries(TEXTS, inner), max_leaves=20)


def exactly(value):
    """A form in which values are equal only if types, order of keys and bits of floats are."""
    if isinstance(value, dict):
        return ("object", [(key, exactly(element)) for key, element in value.items()])
    if isinstance(value, list):
        return ("array", [exactly(element) for element in value])
    return (type(value), struct.pack("<d", value) if isinstance(value, float) else value)


def nested(depth, innermost=0):
    for _ in range(depth):
        innermost = [innermost]
    return innermost


class TestCanonicalText:
    @given(DOCUMENTS)
    @example({"b": -0.0, "a": 5e-324, "": 1.7976931348623157e308})
    def test_round_trip(self, document):
        """Every document reads back equal: types, order of keys, and floats to the bit."""
        text = canonical_text(document)
        assert exactly(read_strict(text, "document")) == exactly(document)

    @given(DOCUMENTS)
    def test_canonical(self, document):
        """Writing it again gives the same text, and Python's own JSON reader sees the same document."""
        text = canonical_text(document)
        assert canonical_text(read_strict(text, "document")) == text
        assert exactly(json.loads(text)) == exactly(document)

    def test_layout(self):
        """Keys stay in the order given, indentation is two spaces, text is not escaped, a newline ends it."""
        document = {
            "b": [1, 0.1],
            "a": {"\N{GREEK SMALL LETTER SIGMA}": None, "empty": []},
            "c": (True, "x\n"),
        }
        assert canonical_text(document) == (
            '{\n  "b": [\n    1,\n    0.1\n  ],\n  "a": {\n    "\N{GREEK SMALL LETTER SIGMA}": null,\n'
            '    "empty": []\n  },\n  "c": [\n    true,\n    "x\\n"\n  ]\n}\n'
        )

    @pytest.mark.parametrize(
        ("value", "text"),
        [
            (0.1, "0.1"),
            (1e23, "1e+23"),
            (2.0**-1074, "5e-324"),
            (100.0, "100.0"),
            (-0.0, "-0.0"),
            (0.1 + 0.2, "0.30000000000000004"),
        ],
    )
    def test_shortest_floats(self, value, text):
        """Floats are written with the fewest digits that read back as the same float."""
        assert canonical_text(value) == text + "\n"

    @pytest.mark.parametrize(
        ("document", "error", "message"),
        [
            (
                {"quantities": {"value": {"levels": [0, 1, 2, {"gain": math.nan}]}}},
                ValueError,
                "quantities.value.levels[3].gain: nan is not a finite number",
            ),
            ([1.0, -math.inf], ValueError, "[1]: -inf is not a finite number"),
            (math.inf, ValueError, "the document: inf is not a finite number"),
            (
                {"corrections": {"float16:float32": {"mean": math.inf}}},
                ValueError,
                'corrections."float16:float32".mean: inf is not a finite number',
            ),
            (
                {"arms": {"float16/approximate": np.float64(1)}},
                TypeError,
                "arms.float16/approximate: numpy.float64 is not a type of JSON",
            ),
            ({"n": np.int64(1)}, TypeError, "n: numpy.int64 is not a type of JSON"),
            ({"b": [np.bool_(True)]}, TypeError, "b[0]: numpy.bool is not a type of JSON"),
            ({"a": np.zeros(2)}, TypeError, "a: numpy.ndarray is not a type of JSON"),
            ({"a": {1}}, TypeError, "a: builtins.set is not a type of JSON"),
            (OrderedDict(), TypeError, "the document: collections.OrderedDict is not a type of JSON"),
            ({"a": {1: 2}}, TypeError, "a: the key 1 is of type int, not str"),
            ({"a": "\ud800"}, ValueError, "a: the text has an unpaired surrogate"),
            ({"\udfff": 1}, ValueError, 'the document: the key "\\udfff" has an unpaired surrogate'),
            (nested(65), ValueError, f"{'[0]' * 64}: nested more than 64 deep"),
        ],
    )
    def test_refused(self, document, error, message):
        """What JSON cannot hold, or would hold as something else, is refused with its path."""
        with pytest.raises(error) as caught:
            canonical_text(document)
        assert str(caught.value) == message

    def test_subclasses_refused(self):
        """A member of an enumeration does not pass as the number or text it also is."""
        kind = enum.Enum("kind", {"PAYS": "pays"}, type=str)
        with pytest.raises(TypeError, match=r"^verdict: .*kind is not a type of JSON$"):
            canonical_text({"verdict": kind.PAYS})

    def test_holds_itself(self):
        """A document that holds itself is refused, not followed for ever."""
        document = []
        document.append(document)
        with pytest.raises(ValueError, match="nested more than 64 deep"):
            canonical_text(document)

    def test_deepest(self):
        """What is nested as deep as the writer accepts, the reader accepts."""
        assert read_strict(canonical_text(nested(64)), "document") == nested(64)


class TestReadStrict:
    @pytest.mark.parametrize(
        ("text", "path", "problem"),
        [
            ('{"a": {"b": 1, "c": 2, "b": 1}}', "a", 'the key "b" stands more than once'),
            ('[0, {"x": 1, "x": 1}]', "[1]", 'the key "x" stands more than once'),
            ('{"a": 1, "a": NaN}', "", 'the key "a" stands more than once'),
            ('{"levels": [1, NaN]}', "levels[1]", "NaN is not a finite number"),
            ('{"a b": -Infinity}', '"a b"', "-Infinity is not a finite number"),
            ("Infinity", "", "Infinity is not a finite number"),
            ('{"a": 1e999}', "a", "the number is too large for float64"),
            ('{"a": "\\ud800"}', "a", "the text has an unpaired surrogate"),
            ('{"\\udc00": 1}', "", 'the key "\\udc00" has an unpaired surrogate'),
            ("[" * 65 + "]" * 65, "[0]" * 64, "nested more than 64 deep"),
            ("[" * 100_000, "", "nested more than 64 deep"),
            ('{"a": 1 "b"}', "", "this is not JSON: Expecting ',' delimiter (line 1, column 9)"),
            ('{"a":\n 1} x', "", "this is not JSON: Extra data (line 2, column 5)"),
            ("", "", "this is not JSON: Expecting value (line 1, column 1)"),
        ],
    )
    def test_refused(self, text, path, problem):
        """What the strict reader refuses, with the path and in these words."""
        with pytest.raises(DocumentError) as caught:
            read_strict(text, "policy.json")
        error = caught.value
        assert (error.source, error.path, error.problem) == ("policy.json", path, problem)
        assert str(error) == f"policy.json: {path}: {problem}" if path else f"policy.json: {problem}"
        assert isinstance(error, NarrowgaugeError)
        assert error.exit_code == 2

    def test_too_many_digits(self):
        """An integer that Python will not convert is refused, not a crash."""
        with pytest.raises(DocumentError, match=r"^x: this cannot be read: .*digits"):
            read_strict("1" * 5000, "x")

    @pytest.mark.parametrize(("text", "bytes_each"), [("x", 1), ("\N{EURO SIGN}", 3)])
    def test_size(self, monkeypatch, text, bytes_each):
        """The limit counts bytes of UTF-8; a document of exactly that many is read."""
        document = f'"{text * 100}"'
        size = 2 + 100 * bytes_each
        monkeypatch.setattr(canonical, "_LARGEST", size)
        assert read_strict(document, "big.json") == text * 100
        monkeypatch.setattr(canonical, "_LARGEST", size - 1)
        with pytest.raises(DocumentError) as caught:
            read_strict(document, "big.json")
        message = f"big.json: the document has {size} bytes, at most {size - 1} are accepted"
        assert str(caught.value) == message

    def test_limit(self):
        """The limit is 64 MiB."""
        assert canonical._LARGEST == 64 * 1024 * 1024

    @given(st.text(max_size=40) | st.text('[]{}":,0123456789eE+-.truefalsnNI \\ud8', max_size=40))
    def test_any_text(self, text):
        """Whatever text comes in, it is read to something that can be written, or refused as a document."""
        try:
            document = read_strict(text, "x")
        except DocumentError:
            return
        assert exactly(read_strict(canonical_text(document), "x")) == exactly(document)


class TestWriteAtomically:
    def test_writes(self, tmp_path):
        """The text is there as UTF-8 with its own line ends, and nothing else is in the folder."""
        path = tmp_path / "audit.json"
        write_atomically(path, "\N{GREEK SMALL LETTER SIGMA}\n")
        assert path.read_bytes() == "\N{GREEK SMALL LETTER SIGMA}\n".encode()
        write_atomically(path, "second\n")
        assert path.read_bytes() == b"second\n"
        assert os.listdir(tmp_path) == ["audit.json"]

    def test_ordinary_permissions(self, tmp_path):
        """The file has the permissions of any file that the user makes."""
        (tmp_path / "plain").write_text("")
        write_atomically(tmp_path / "atomic", "")
        assert (tmp_path / "atomic").stat().st_mode == (tmp_path / "plain").stat().st_mode

    @pytest.mark.parametrize("step", ["fsync", "replace"])
    @pytest.mark.parametrize("failure", [OSError(28, "No space left on device"), KeyboardInterrupt()])
    def test_failure(self, tmp_path, monkeypatch, step, failure):
        """When a step fails, or is interrupted, the old file stays and the temporary is gone."""
        path = tmp_path / "audit.json"
        path.write_text("old")

        def fail(*_):
            raise failure

        monkeypatch.setattr(os, step, fail)
        with pytest.raises(type(failure)):
            write_atomically(path, "new")
        assert os.listdir(tmp_path) == ["audit.json"]
        assert path.read_text() == "old"

    def test_synced_before_it_is_named(self, tmp_path, monkeypatch):
        """All bytes are on the disk, in the same folder, before the file takes its name."""
        steps, fsync, replace = [], os.fsync, os.replace

        def watched_fsync(descriptor):
            steps.append(("fsync", os.fstat(descriptor).st_size))
            fsync(descriptor)

        def watched_replace(source, target):
            steps.append(("replace", source.parent))
            replace(source, target)

        monkeypatch.setattr(os, "fsync", watched_fsync)
        monkeypatch.setattr(os, "replace", watched_replace)
        write_atomically(tmp_path / "audit.json", "12345")
        assert steps == [("fsync", 5), ("replace", tmp_path)]

    def test_not_encodable(self, tmp_path):
        """Text that UTF-8 cannot hold is refused before anything is made."""
        with pytest.raises(UnicodeEncodeError):
            write_atomically(tmp_path / "audit.json", "\ud800")
        assert os.listdir(tmp_path) == []

    def test_no_folder(self, tmp_path):
        """A folder that is not there is the system's error."""
        with pytest.raises(FileNotFoundError):
            write_atomically(tmp_path / "none" / "audit.json", "x")
