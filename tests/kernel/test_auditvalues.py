"""The values of an audit file: what a kernel is passed, and mappings that Python hands over."""

from __future__ import annotations

import enum
import functools
import tomllib

import numpy as np
import pytest
from auditfile_cases import FULL, LEAST, PARAMETER, POSITIVE, RUN, least, read, refusal

from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.auditfile import audit_file_from


class TestParameters:
    def test_keywords(self, tmp_path):
        """Arrays of numbers arrive as float64 arrays of their shape, all else as TOML has it."""
        keywords = read(tmp_path, FULL).keywords()
        rates = keywords.pop("rates")
        assert rates.dtype == np.float64
        np.testing.assert_array_equal(rates, [[1, 2.5], [3, 4]])
        expected = {"volatility": 0.4, "years": 3, "name": "call", "cap": True, "marks": ["a", "b"]}
        assert keywords == expected
        assert [type(value) for value in keywords.values()] == [type(value) for value in expected.values()]

    def test_keywords_are_fresh(self, tmp_path):
        """A kernel that writes into its parameters does not change those of the next run."""
        audit_file = read(tmp_path, FULL)
        first = audit_file.keywords()
        first["rates"][:] = 0
        first["marks"].append("c")
        assert audit_file.keywords()["rates"][0, 1] == 2.5
        assert audit_file.keywords()["marks"] == ["a", "b"]

    @pytest.mark.parametrize(("text", "shape"), [("[]", (0,)), ("[[], []]", (2, 0)), ("[[[1]]]", (1, 1, 1))])
    def test_shapes(self, tmp_path, text, shape):
        """An array has the shape of its nesting; an empty one is an array of float64, one of integers holds indices."""
        value = read(tmp_path, f"{LEAST}[parameters]\na = {text}").keywords()["a"]
        assert (value.shape, value.dtype) == (shape, np.int64 if value.size else np.float64)
        assert read(tmp_path, f"{LEAST}[parameters]\na = [1, 2.0]").keywords()["a"].dtype == np.float64

    def test_deepest_array(self, tmp_path):
        """An array nested as deep as is accepted is one NumPy can hold."""
        audit_file = read(tmp_path, f"{LEAST}[parameters]\na = {'[' * 32}1{']' * 32}")
        assert audit_file.keywords()["a"].ndim == 32
        assert audit_file_from({**least(), "parameters": audit_file.parameters}).keywords()["a"].ndim == 32

    def test_not_a_table(self, tmp_path):
        """Parameters are a table."""
        assert refusal(tmp_path, "parameters = 3" + LEAST) == "parameters: 3 is an integer; accepted: a table"

    def test_greek_letters(self, tmp_path):
        """A name that Python reads as it is written is accepted, in any script."""
        text = f'{LEAST}[parameters]\n"\N{GREEK SMALL LETTER SIGMA}" = 0.2\n'
        assert read(tmp_path, text).keywords() == {"\N{GREEK SMALL LETTER SIGMA}": 0.2}


def module_level_kernel(dW, h):
    return dW.sum(axis=0)


class TestMapping:
    def test_same_as_the_file(self, tmp_path):
        """A mapping of the shape of the file gives the same document as the file."""
        assert audit_file_from(tomllib.loads(FULL)).asked() == read(tmp_path, FULL).asked()

    def test_function(self, tmp_path, monkeypatch):
        """A function stands for its module and name, and is kept."""
        monkeypatch.chdir(tmp_path)
        mapping = least()
        mapping["kernel"]["run"] = module_level_kernel
        audit_file = audit_file_from(mapping, source="study")
        assert audit_file.function is module_level_kernel
        assert audit_file.kernel.run == f"{__name__}:module_level_kernel"
        assert (audit_file.source, audit_file.stem, audit_file.folder) == ("study", "study", tmp_path)
        assert mapping["kernel"]["run"] is module_level_kernel

    def test_other_callables(self):
        """A function without a name of its own is accepted; what has no code of its own to copy is refused."""
        mapping = least()
        mapping["kernel"]["run"] = function = lambda dW, h: dW
        audit_file = audit_file_from(mapping)
        assert audit_file.kernel.run.split(":")[1] == "TestMapping.test_other_callables.<locals>.<lambda>"
        assert audit_file.function is function
        for other, kind in ((functools.partial(module_level_kernel, h=1), "partial"), (np.exp, "ufunc")):
            mapping = least()
            mapping["kernel"]["run"] = other
            with pytest.raises(AuditFileError) as caught:
                audit_file_from(mapping)
            what = f"audit: kernel.run: a {kind} cannot be copied into another arithmetic"
            assert str(caught.value) == f"{what}; accepted: a function defined with def, or file.py:function"

    def test_values_of_python(self):
        """NumPy's arrays and scalars, tuples and members of enumerations become plain values of TOML."""

        class Kind(enum.StrEnum):
            CALL = "call"

        class Count(enum.IntEnum):
            TWO = 2

        mapping = least()
        mapping["ladder"] = {"horizon": np.float32(0.5), "finest": np.int64(3)}
        mapping["formats"] = {"narrow": ("float16",)}
        mapping["parameters"] = {
            "grid": np.array([[1, 2], [3, 4]]),
            "rate": np.float64(0.5),
            "kind": Kind.CALL,
            "count": Count.TWO,
            "flag": np.bool_(True),
            "pair": (1.0, 2),
        }
        asked = audit_file_from(mapping).asked()
        assert asked["parameters"] == {
            "grid": [[1, 2], [3, 4]],
            "rate": 0.5,
            "kind": "call",
            "count": 2,
            "flag": True,
            "pair": [1.0, 2],
        }
        assert [type(value) for value in asked["parameters"].values()] == [list, float, str, int, bool, list]
        assert asked["ladder"]["horizon"] == 0.5
        assert asked["formats"]["narrow"] == ["float16"]

    def test_none_is_not_given(self):
        """None for a table or a key of one counts as not given."""
        mapping = {**least(), "target": None, "sampling": {"seed": None}}
        audit_file = audit_file_from(mapping)
        assert audit_file.target is None
        assert "sampling.seed" in audit_file.assumed
        assert audit_file.asked() == audit_file_from(least()).asked()

    @pytest.mark.parametrize(
        ("change", "message"),
        [
            (
                {"parameters": {"a": None}},
                f"audit: parameters.a: this is of type NoneType; accepted: {PARAMETER}",
            ),
            (
                {"parameters": {"a": 1j}},
                f"audit: parameters.a: this is of type complex; accepted: {PARAMETER}",
            ),
            (
                {"parameters": {3: 1}},
                "audit: parameters: the key 3 is an integer; accepted: keys that are strings",
            ),
            (
                {"ladder": {"horizon": 1.0, "finest": {1}}},
                "audit: ladder.finest: this is of type set; accepted: an integer of 0 or more",
            ),
            (
                {"kernel": {"run": "f", "takes": "normals"}},
                f'audit: kernel.run: "f" does not end in ":" and the name of a function; accepted: {RUN}',
            ),
            (
                {"ladder": {"horizon": None, "finest": 1}},
                f"audit: ladder.horizon: missing; accepted: {POSITIVE}",
            ),
        ],
    )
    def test_refused(self, change, message):
        """What TOML could not have said is refused as a wrong value in a file is."""
        with pytest.raises(AuditFileError) as caught:
            audit_file_from({**least(), **change})
        assert str(caught.value) == message

    def test_not_a_mapping(self):
        """Anything but a mapping is refused."""
        with pytest.raises(AuditFileError) as caught:
            audit_file_from([1])
        assert str(caught.value) == "audit: this is an array; accepted: a mapping of tables"

    def test_holds_itself(self):
        """A mapping that holds itself is refused, not followed for ever."""
        mapping = least()
        mapping["parameters"] = mapping
        with pytest.raises(AuditFileError, match=r": nested more than 32 deep; accepted: a mapping of tables$"):
            audit_file_from(mapping)
