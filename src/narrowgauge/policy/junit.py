"""The report of a gate as JUnit XML: a suite for each audit file, a testcase for each of its levels and checks.

JUnit's format has no standard; this keeps to the elements and attributes that readers have in common. A testcase with a
failing claim has a `failure`, one with an undecided claim an `error`: no reader counts either among the passed. A note
is text of a testcase that passes. Text is cleaned first (`record.printable`), so that every character is one of
"Extensible Markup Language (XML) 1.0", W3C, fifth edition, 2008, production 2.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from xml.etree.ElementTree import Element, SubElement, indent, tostring

from narrowgauge.record.gate import CHECKS, Finding, GateEntry, GateReport
from narrowgauge.record.printable import clean

__all__ = ["junit_text"]

_OUTCOMES = {"fails": "failure", "undecided": "error"}  # the element of the worst state that a testcase has


@dataclass(frozen=True, slots=True)
class _Case:
    """The findings of one check on one level."""

    name: str
    check: str
    findings: Sequence[Finding]

    @property
    def outcome(self) -> str | None:
        """The element that says what is wrong, or None."""
        states = {one.state for one in self.findings}
        return next((element for state, element in _OUTCOMES.items() if state in states), None)


def junit_text(report: GateReport) -> str:
    """Return a report as JUnit XML in UTF-8 (declaration included)."""
    root = Element("testsuites", name="narrowgauge gate")
    everything: list[_Case] = []
    for entry in report.gates:
        cases = _cases(entry)
        everything += cases
        _suite(root, entry, cases)
    _count(root, everything)
    indent(root)
    return f'<?xml version="1.0" encoding="UTF-8"?>\n{tostring(root, encoding="unicode")}\n'


def _cases(entry: GateEntry) -> list[_Case]:
    """Return the testcases of one audit file, in the order of the checks, the whole of the ladder before its levels."""
    found: dict[tuple[int, int], list[Finding]] = {}
    order = list(CHECKS)
    for one in entry.findings:
        found.setdefault((order.index(one.check), -1 if one.level is None else one.level), []).append(one)
    return [
        _Case(f"{f'level {level}' if level >= 0 else 'all levels'}: {order[check]}", order[check], findings)
        for (check, level), findings in sorted(found.items())
    ]


def _suite(root: Element, entry: GateEntry, cases: Sequence[_Case]) -> None:
    suite = SubElement(root, "testsuite", name=clean(f"{entry.audit}: {entry.kernel}"))
    _count(suite, cases)
    properties = SubElement(suite, "properties")
    known = {"verdict": entry.verdict, "policy": entry.policy, "kernel": f"{entry.place.file}:{entry.place.line}"}
    known |= {} if entry.seed is None else {"seed": str(entry.seed)}
    for name, value in known.items():
        SubElement(properties, "property", name=name, value=clean(value))
    # Readers cut a class name at its dots, and tell testcases apart by class name and name alone.
    group = clean(entry.audit.removesuffix(".toml")).replace(".", "_").replace("/", ".")
    for case in cases:
        _case(SubElement(suite, "testcase", classname=group, name=case.name), case, entry)


def _case(element: Element, case: _Case, entry: GateEntry) -> None:
    wrong = [one for state in _OUTCOMES for one in case.findings if one.state == state]
    if case.outcome is not None:
        said = SubElement(element, case.outcome, type=case.check, message=_line(wrong[0]))
        lines = [f"{_line(one)} [{_where(one, entry)}]" for one in wrong]
        said.text = "\n".join([*lines, clean(f"to renew the policy, where the change is meant: {entry.renew}")])
    notes = [_line(one) for one in case.findings if one.state == "note"]
    if notes:
        SubElement(element, "system-out").text = "\n".join(notes)


def _line(finding: Finding) -> str:
    """Return a finding in one line; what is undecided says that it is no pass."""
    undecided = "undecided, which is no pass: " if finding.state == "undecided" else ""
    return undecided + clean(finding.message)


def _where(finding: Finding, entry: GateEntry) -> str:
    place = finding.place or entry.place
    return clean(f"{place.file}:{place.line}")


def _count(element: Element, cases: Sequence[_Case]) -> None:
    outcomes = [case.outcome for case in cases]
    element.set("tests", str(len(cases)))
    element.set("failures", str(outcomes.count("failure")))
    element.set("errors", str(outcomes.count("error")))
    element.set("skipped", "0")
