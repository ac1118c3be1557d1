"""The JUnit file of a gate: it parses whatever it holds, and nothing that does not hold counts as passed."""

from xml.etree import ElementTree

from gate_reports import HOSTILE, REPORTS, entry, every_state, finding, report
from hypothesis import given

from narrowgauge.policy.junit import junit_text


def parsed(made):
    return ElementTree.fromstring(junit_text(made).encode("utf-8"))


def outcome(case):
    """The elements of a testcase that say it did not pass."""
    return [child.tag for child in case if child.tag in ("failure", "error", "skipped")]


@given(REPORTS)
def test_it_parses_and_has_a_case_for_each_audit_file_level_and_check(made):
    """Whatever the texts hold; each case is as bad as the worst of its findings."""
    root = parsed(made)
    assert len(root) == len(made.gates)
    for suite, one in zip(root, made.gates, strict=True):
        expected = {}
        for found in one.findings:
            expected.setdefault((found.level, found.check), set()).add(found.state)
        cases = suite.findall("testcase")
        assert len(cases) == len(expected) == len({case.get("name") for case in cases})
        for (level, check), states in expected.items():
            name = f"{'all levels' if level is None else f'level {level}'}: {check}"
            (case,) = [case for case in cases if case.get("name") == name]
            worst = ["failure"] if "fails" in states else ["error"] if "undecided" in states else []
            assert outcome(case) == worst


@given(REPORTS)
def test_the_counts_are_those_of_the_cases(made):
    """A reader that trusts the attributes comes to the verdict of one that counts, on each suite and on the whole."""
    root = parsed(made)
    for element in (root, *root):
        cases = list(element.iter("testcase"))
        outcomes = [outcome(case) for case in cases]
        assert int(element.get("tests")) == len(cases)
        assert int(element.get("failures")) == outcomes.count(["failure"])
        assert int(element.get("errors")) == outcomes.count(["error"])
        assert int(element.get("skipped")) == 0
    assert (int(root.get("failures")), int(root.get("errors"))) == (0, 0) or made.verdict != "pass"


def test_a_failure_says_what_where_and_what_to_do():
    """Every finding of the case that does not hold, with its line, and the command that renews the policy."""
    (case,) = [one for one in parsed(every_state()).iter("testcase") if one.get("name") == "all levels: escapes"]
    (failure,) = case
    assert (failure.get("type"), failure.get("message")) == ("escapes", "a value escapes")
    assert "[models/a.py:3]" in failure.text
    assert "narrowgauge policy models/reserve.toml" in failure.text


def test_what_is_undecided_says_that_it_is_no_pass():
    """In words, too: the element alone may be shown as a fault of the test."""
    (error,) = parsed(report(entry(finding("undecided", message="so far 1.2")))).iter("error")
    assert error.get("message") == "undecided, which is no pass: so far 1.2"


def test_a_note_passes_and_is_told():
    """A note is no failure, and is not lost."""
    (case,) = parsed(report(entry(finding("note", message="the kernel has changed since")))).iter("testcase")
    assert outcome(case) == []
    assert case.find("system-out").text == "the kernel has changed since"


def test_control_characters_are_left_out_and_the_rest_is_kept():
    """What XML cannot hold goes, what it can stays as it is."""
    (failure,) = parsed(report(entry(finding("fails", message=HOSTILE)))).iter("failure")
    assert failure.get("message").startswith("ab[31m")
    assert "]]> & <b>|" in failure.get("message")
    assert "\ud800" not in failure.text


def test_two_audit_files_of_one_kernel_have_cases_of_their_own():
    """Readers tell cases apart by class and name."""
    made = report(entry(finding(), audit="a/low.toml"), entry(finding(), audit="a/high.toml"))
    assert [case.get("classname") for case in parsed(made).iter("testcase")] == ["a.low", "a.high"]
