"""An audit read back from its folder: what is refused, and where the message says it is."""

from __future__ import annotations

import json

import made_records as made
import pages
import pytest
import test_approximate_text as approximate

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.record import auditreading
from narrowgauge.record.auditreading import audit_in, audit_record
from narrowgauge.record.canonical import DocumentError

FOLDER = "accepted: a folder into which narrowgauge audit has written"


def document():
    return json.loads(json.dumps(made.audit_record().document()))


def refused(found):
    with pytest.raises(DocumentError) as caught:
        audit_record(found, "audit.json")
    return str(caught.value)


@pytest.mark.parametrize(
    "record", [made.audit_record, approximate.record, made.troubled_record, pages.nonfinite_record]
)
def test_what_was_written_is_read(tmp_path, record):
    """A record comes back equal."""
    assert audit_in(pages.written_audit(tmp_path, record())) == record()


def test_a_folder_that_is_none(tmp_path):
    """No folder, a file, an empty folder and an audit that has not ended are told apart."""
    cases = {
        tmp_path / "none": "there is no such folder",
        tmp_path / "file": "is no folder",
        tmp_path / "empty": "holds no audit.json",
        tmp_path / "stopped": "holds no audit.json, since the audit there has not ended (--resume goes on with it)",
        tmp_path / "odd": "audit.json cannot be read: Is a directory",
    }
    (tmp_path / "file").write_text("", encoding="utf-8")
    (tmp_path / "empty").mkdir()
    (tmp_path / "stopped").mkdir()
    (tmp_path / "stopped" / "blocks.sqlite").write_bytes(b"")
    (tmp_path / "odd" / "audit.json").mkdir(parents=True)
    for folder, words in cases.items():
        with pytest.raises(DocumentError) as caught:
            audit_in(folder)
        assert str(caught.value) == f"{folder}: {words}; {FOLDER}"


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (b"{}\n\xff", "line 2 is not UTF-8 (byte 0xff)"),
        (b'{"schema": ', "this is not JSON: Expecting value (line 1, column 12)"),
        (b"[]", "this is no audit; accepted: an object with a schema"),
        (b'{"schema": 1, "schema": 2}', 'the key "schema" stands more than once'),
        (b"{}", 'schema: is missing; accepted: "narrowgauge-audit/1"'),
    ],
)
def test_a_file_that_is_no_record(tmp_path, data, words):
    """The message has the file and the place in it."""
    (tmp_path / "audit.json").write_bytes(data)
    with pytest.raises(DocumentError) as caught:
        audit_in(tmp_path)
    assert str(caught.value) == f"{tmp_path / 'audit.json'}: {words}"


def test_a_newer_record():
    """A schema that this version does not know is named before anything else is looked at."""
    found = {"schema": "narrowgauge-audit/2", "new": 1}
    words = 'audit.json: schema: "narrowgauge-audit/2" is not known to this version; accepted: "narrowgauge-audit/1"'
    assert refused(found) == words


def test_a_field_of_another_type():
    """The path leads to it."""
    found = document()
    found["quantities"]["option"]["levels"][1]["paths"] = "many"
    words = 'audit.json: quantities.option.levels[1].paths: "many" is not accepted; accepted: a whole number'
    assert refused(found) == words


def test_a_field_that_nobody_knows():
    """It is named, and so is the place."""
    found = document()
    found["kernel"]["speed"] = 1
    assert refused(found) == 'audit.json: kernel: unknown key "speed"; accepted: run, fingerprint'


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda found: found.update(quantities={}), "quantities: there is none"),
        (lambda found: found["arms"].pop("float16"), "arms: there is no 'float16'"),
        (lambda found: found["arms"].pop("float64"), "arms: there is no 'float64'"),
        (
            lambda found: found["quantities"]["option"]["levels"].pop(),
            "quantities: they do not have the same levels, at least one",
        ),
        (
            lambda found: found["quantities"]["output"]["levels"][2]["arms"].pop("bfloat16"),
            "quantities.output.levels[2].arms: there is no 'bfloat16'",
        ),
        (
            lambda found: found["quantities"]["output"]["finest_paying_level"].pop("bfloat16"),
            "quantities.output.finest_paying_level: there is no 'bfloat16'",
        ),
        (
            lambda found: found["quantities"]["option"]["levels"][0].update(steps=0),
            "quantities.option.levels[0].steps: a level has at least one step and one block",
        ),
        (
            lambda found: found["quantities"]["option"]["levels"][0]["best"].update(narrow="float8"),
            "quantities.option.levels[0].best: its scheme names an arm that is not there",
        ),
        (
            lambda found: found["rules"].update(levels_sharing=0),
            "rules.levels_sharing: at least one level shares the target",
        ),
        (lambda found: found["arms"]["float16"].update(format="half"), "arms.float16.format: 'half' is no format"),
    ],
)
def test_a_record_that_refers_to_nothing(change, words):
    """What a hand has left dangling is named, not met as an error of the program."""
    found = document()
    change(found)
    assert refused(found) == f"audit.json: {words}; accepted: what this version writes"


def test_every_format_can_be_read():
    """The reader, which imports no arithmetic, knows the formats that there are."""
    assert set(auditreading._FORMATS) == set(FORMATS)
