"""Policies as text: any of them reads back equal, and what is none is refused with the path into it."""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys

import jsonschema
import msgspec
import pytest
from hypothesis import HealthCheck, given, settings
from policy_cases import minimal, policies

from narrowgauge import __version__
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.errors import NarrowgaugeError
from narrowgauge.record import policy
from narrowgauge.record.canonical import DocumentError
from narrowgauge.record.policy import FormatName, ParameterPart, policy_text, read_policy, read_policy_text
from narrowgauge.record.schema import PUBLISHED, schema_text

SLOW = settings(
    max_examples=40,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large, HealthCheck.large_base_example],
)


def changed(*steps, to):
    """The text of the small policy with the value at a path replaced, or left out where `to` is `...`."""
    document = minimal()
    inside = document
    for step in steps[:-1]:
        inside = inside[step]
    inside[steps[-1]] = to
    if to is ...:
        del inside[steps[-1]]
    return json.dumps(document)


def refusal(text):
    with pytest.raises(DocumentError) as caught:
        read_policy_text(text, "p.json")
    error = caught.value
    assert isinstance(error, NarrowgaugeError)
    assert str(error).startswith("p.json: ")
    return error.path, error.problem


class TestText:
    @SLOW
    @given(policies())
    def test_any_policy_reads_back_equal(self, document):
        """Through text and back a policy is the same, to the last bit of each number and in the order of its keys."""
        text = policy_text(document)
        again = read_policy_text(text, "p.json")
        assert again == document
        assert policy_text(again) == text

    def test_canonical(self):
        """Keys stand in the order of the types, whatever order they were read in, and a newline ends the text."""
        document = minimal()
        shuffled = dict(reversed(document.items()))
        text = policy_text(read_policy_text(json.dumps(shuffled), "p.json"))
        assert text == json.dumps(document, indent=2) + "\n"

    @pytest.mark.parametrize("value", [math.nan, math.inf])
    def test_only_finite_numbers_are_written(self, value):
        """What no JSON holds is refused by the writer."""
        document = read_policy_text(json.dumps(minimal()), "p.json")
        broken = msgspec.structs.replace(document, assumed={"cost.draws": value})
        with pytest.raises(ValueError, match="is not a finite number"):
            policy_text(broken)


class TestReading:
    @pytest.mark.parametrize(
        ("text", "path", "problem"),
        [
            ("[]", "", "an array is no policy; accepted: an object"),
            ("{}", "schema", "null is no schema of a policy; accepted: narrowgauge-policy/1"),
            (changed("levels", 1, "paths", to="many"), "levels[1].paths", '"many" is not accepted'),
            (changed("levels", 1, "paths", to=True), "levels[1].paths", "true is not accepted"),
            (changed("levels", 1, "paths", to=2.5), "levels[1].paths", "2.5 is not accepted"),
            (changed("levels", 1, "paths", to=0), "levels[1].paths", "0 is not accepted"),
            (changed("levels", 1, "paths", to=2**60), "levels[1].paths", "1152921504606846976 is not accepted"),
            (changed("levels", 1, "paths", to=10**400), "levels[1].paths", f"1{'0' * 59} ... is not accepted"),
            (changed("plan", "cost", to=10**400), "plan.cost", f"1{'0' * 59} ... is not accepted"),
            (changed("levels", 0, "gain", to=math.nan), "levels[0].gain", "NaN is not a finite number"),
            (changed("levels", 0, "gain", to=-math.inf), "levels[0].gain", "-Infinity is not a finite number"),
            (changed("levels", 0, "narrow", to="float128"), "levels[0].narrow", '"float128" is not accepted'),
            (changed("levels", 0, "wide", to=None), "levels[0]", "a split, and nothing else, has wide"),
            (changed("levels", 0, "narrow", to="float32"), "levels[0]", "narrow and wide are the same"),
            (changed("levels", 0, "colour", to=1), "levels[0]", 'unknown key "colour"; accepted: level, steps, h'),
            (changed("levels", 0, "gain", to=...), "levels[0]", 'the key "gain" is missing'),
            (changed("levels", 0, "measured", "a b", to=3), 'levels[0].measured."a b"', "3 is not accepted"),
            (changed("levels", 1, "steps", to=5), "", "level 1 of the ladder has 4 steps, the entry says 5"),
            (changed("levels", 1, "level", to=2), "", "levels is not one entry for each level of the ladder"),
            (changed("ladder", "finest", to=2**53), "ladder.finest", "9007199254740992 is not accepted"),
            (changed("evidence", "paths", to=[1]), "", "evidence.paths has not one number for each level"),
            (changed("target", "rmse", to={}), "target.rmse", "an object is not accepted"),
            (changed("target", "rmse", to={"other": 1.0}), "", "target.rmse, target.bias_budget and each level"),
            (changed("kernel", "raw", to="sha256:0"), "kernel.raw", '"sha256:0" is not accepted'),
            (changed("kernel", "run", to="\ud800"), "kernel.run", "the text has an unpaired surrogate"),
            (changed("domain", "parameters", "rate", to={}), "domain.parameters.rate", "a parameter has either fixed"),
            (
                changed("domain", "parameters", "rate", to={"low": 1.0, "high": 1.0, "scale": "linear"}),
                "domain.parameters.rate",
                "low is not below high",
            ),
            (
                changed("domain", "parameters", "rate", to={"low": 0.0, "high": 1.0, "scale": "log"}),
                "domain.parameters.rate",
                "a log scale begins above 0",
            ),
            (
                changed("domain", "parameters", "rate", to={"fixed": [1.0, {}]}),
                "domain.parameters.rate",
                "fixed is a number of at most 64 bits",
            ),
            (
                changed("domain", "parameters", "rate", to={"fixed": 2**63}),
                "domain.parameters.rate",
                "fixed is a number of at most 64 bits",
            ),
            (changed("cautions", to=["a", None]), "cautions[1]", "null is not accepted; accepted: text"),
            (changed("today", to=[[[[1]]]]), "today", "an array is not accepted"),
            ('{"a": ' + "[" * 70 + "]" * 70 + "}", "a" + "[0]" * 63, "nested more than 64 deep"),
            ('{"a": ' + "[" * 100_000, "", "nested more than 64 deep"),
            ('{"a": ' + "7" * 5000 + "}", "a", "this cannot be read: an integer of 5000 digits"),
            (
                '{"a": ' + "7" * 5000 + ", 'b'}",
                "",
                "this is not JSON: Expecting property name enclosed in double quotes",
            ),
            ('{"a": [1e999]}', "a[0]", "the number is too large for float64"),
            ('{"a": {"b": 1, "b": 2, "c": 3}}', "a", 'the key "b" stands more than once'),
            (
                changed("levels", 0, "measured", "value", "arms", to={"float16": {"lost_additions": {"share": 2}}}),
                "levels[0].measured.value.arms.float16.lost_additions.share",
                "2 is not accepted; accepted: a number of at least 0 and of at most 1",
            ),
        ],
    )
    def test_refused(self, text, path, problem):
        """What is no policy is refused with the path to the place, what is wrong there, and what is accepted."""
        where, what = refusal(text)
        assert where == path
        assert what.startswith(problem)

    @pytest.mark.parametrize(
        ("kind", "accepted"),
        [
            (("levels", 0, "paths"), "a whole number of at least 1 and of at most 9007199254740992"),
            (("levels", 0, "gain"), "a number or null"),
            (("ladder", "horizon"), "a number above 0"),
            (("levels", 0, "draws"), '"approximate", "exact"'),
            (("kernel", "fingerprint"), "text of the form ^sha256:[0-9a-f]{64}$"),
            (("plan", "replanned"), "true or false"),
            (("levels",), "an array of at least 1"),
            (("target", "rmse"), "an object of at least 1"),
            (("target",), "an object"),
            (
                ("domain", "parameters", "rate", "fixed"),
                "true or false or a whole number or a number or text or an array",
            ),
        ],
    )
    def test_a_refusal_says_what_is_accepted(self, kind, accepted):
        """Of the type and the bounds that the place has."""
        wrong = {"an": "object"} if kind != ("target",) else 1
        wrong = [] if kind == ("levels",) else {} if kind == ("target", "rmse") else wrong
        problem = refusal(changed(*kind, to=wrong))[1]
        assert f"accepted: {accepted}" in problem

    @pytest.mark.parametrize(
        ("by", "named"),
        [
            ("narrowgauge 7.8.9", '"narrowgauge 7.8.9"'),
            (None, "a version that it does not name"),
            ({}, "a version that"),
        ],
    )
    def test_a_newer_version_is_named(self, by, named):
        """A policy of a newer schema is refused for that alone, whatever else is in it, and says who wrote it."""
        path, problem = refusal(json.dumps({"schema": "narrowgauge-policy/2", "written_by": by, "new": {"part": 1}}))
        assert path == "schema"
        assert problem.startswith(f'"narrowgauge-policy/2" is newer than what narrowgauge {__version__} reads')
        assert f"the policy was written by {named}" in problem

    @pytest.mark.parametrize(
        "schema", ["narrowgauge-policy/0", "narrowgauge-policy/01", "narrowgauge-audit/1", 1, None]
    )
    def test_another_schema(self, schema):
        """What is no policy by its own words is not read as one."""
        path, problem = refusal(changed("schema", to=schema))
        assert (path, problem.partition(" is no ")[2]) == (
            "schema",
            "schema of a policy; accepted: narrowgauge-policy/1",
        )

    def test_many_keys(self):
        """A duplicate behind 200,000 keys is found by one pass over them."""
        text = "{" + "".join(f'"{number}": 0, ' for number in range(200_000)) + '"7": 1}'
        assert refusal(text) == ("", 'the key "7" stands more than once')

    def test_control_characters_do_not_reach_a_message(self):
        """What a policy holds cannot move a terminal's cursor."""
        text = changed("schema", to="\x1b[2J")
        assert "\x1b" not in refusal(text)[1]


class TestFiles:
    def test_read(self, tmp_path):
        """A file reads as its text does."""
        path = tmp_path / "p.json"
        path.write_text(json.dumps(minimal()), encoding="utf-8")
        assert read_policy(path) == read_policy_text(path.read_text(encoding="utf-8"), "p.json")

    def test_too_large(self, tmp_path, monkeypatch):
        """A file is read no further than the limit; one of exactly that size is read."""
        path = tmp_path / "p.json"
        text = json.dumps(minimal())
        path.write_text(text, encoding="utf-8")
        monkeypatch.setattr(policy, "LARGEST", len(text))
        assert read_policy(path).today == "float64"
        monkeypatch.setattr(policy, "LARGEST", len(text) - 1)
        with pytest.raises(
            DocumentError, match=f"has more than {len(text) - 1} bytes, at most {len(text) - 1} are accep"
        ):
            read_policy(path)

    @pytest.mark.parametrize(
        ("data", "problem"),
        [
            (None, "there is no such file"),
            ("folder", "cannot be read (Is a directory)"),
            (b'{\n"a": "\xff"}', "line 2 is not UTF-8 (byte 0xff)"),
            (b"\xef\xbb\xbf{}", "this is not JSON: Unexpected UTF-8 BOM (decode using utf-8-sig) (line 1, column 1)"),
        ],
    )
    def test_no_file(self, tmp_path, data, problem):
        """What cannot be read is one message with the path of the file."""
        path = tmp_path / "p.json"
        if data == "folder":
            path.mkdir()
        elif data is not None:
            path.write_bytes(data)
        with pytest.raises(DocumentError) as caught:
            read_policy(path)
        assert str(caught.value) == f"{path}: {problem}"


class TestSchema:
    def test_the_published_schema_is_that_of_the_types(self):
        """A change of the types changes the file beside them; NARROWGAUGE_ACCEPT=1 writes it."""
        if os.environ.get("NARROWGAUGE_ACCEPT") == "1":
            PUBLISHED.write_text(schema_text(), encoding="utf-8")
        assert PUBLISHED.read_text(encoding="utf-8") == schema_text()

    def test_it_is_a_schema(self):
        """It holds to the meta-schema that it names, the one of 2020-12."""
        schema = json.loads(schema_text())
        assert schema["$schema"] == "https://json-schema.org/draft/2020-12/schema"
        jsonschema.Draft202012Validator.check_schema(schema)

    @SLOW
    @given(policies())
    def test_it_accepts_any_policy(self, document):
        """What the writer writes, another program may check by the schema alone."""
        validator = jsonschema.Draft202012Validator(json.loads(schema_text()))
        assert validator.is_valid(json.loads(policy_text(document)))

    @pytest.mark.parametrize(
        "text",
        [
            changed("levels", 1, "paths", to="many"),
            changed("levels", 1, "paths", to=0),
            changed("levels", 0, "narrow", to="float128"),
            changed("levels", 0, "colour", to=1),
            changed("levels", 0, "gain", to=...),
            changed("kernel", "raw", to="sha256:0"),
            changed("schema", to="narrowgauge-policy/2"),
        ],
    )
    def test_it_refuses_what_the_reader_does(self, text):
        """Wrong types, numbers out of bounds, unknown and missing keys."""
        assert not jsonschema.Draft202012Validator(json.loads(schema_text())).is_valid(json.loads(text))
        refusal(text)


def test_the_formats_are_all_that_there_are():
    """The names that a policy may use are those of the arithmetic."""
    assert set(FormatName.__args__) == set(FORMATS)


def test_a_parameter_in_a_file_holds_what_it_says():
    """Keys that say nothing are left out."""
    document = read_policy_text(json.dumps(minimal()), "p.json")
    assert document.domain.parameters["rate"] == ParameterPart(fixed=0.01)
    assert json.loads(policy_text(document))["domain"]["parameters"]["rate"] == {"fixed": 0.01}


def test_reading_needs_no_numpy():
    """A policy is read, and its schema made, where numpy is not imported."""
    code = "import narrowgauge.record.policy, narrowgauge.record.schema, sys; sys.exit('numpy' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
