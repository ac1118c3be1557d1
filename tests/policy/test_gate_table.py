"""What the terminal shows of a gate: its words, its width, and the claim that is nearest to its limit."""

import pytest
from gate_reports import HOSTILE, REPORTS, entry, every_state, finding, report
from hypothesis import given
from msgspec.structs import replace

from narrowgauge.record.policy import MachinePart
from narrowgauge.report.gate import gate_lines

FAILING = """\
models/bad.toml: the gate FAILS
policy models/reserve.policy.json, kernel reserve.py:value
  (models/reserve.py:25)
4,096 to 8,192 paths a level, seed 7
the policy is of this class of machine, Linux x86_64 (AVX2)

check    found             nearest to its limit
escapes  1 fails
bias     1 undecided       1.75 (1.50 to 2.00), at least 1.25: level
                           2, option, float16
gain     1 fails, 1 holds  1.75 (1.50 to 2.00), at least 1.25: level
                           2, option, float16

fails: gain, measured twice: level 2: its gain is 1.1 (1 to 1.2), at
  least 1.25 is accepted
fails: escapes: a value escapes (models/a.py:3)
undecided: bias: level 2: its bias is open

gain asks whether a level still costs so many times less than it does
  today
escapes asks whether no value leaves the emulation on a line where
  none did
bias asks whether rounding shifts the mean of a level by no more than
  its share of the target

to renew the policy, where the change is meant: narrowgauge policy
  models/reserve.toml
"""


def test_a_failing_gate_word_for_word():
    """The table, what does not hold with its line, what those checks ask, and the way out."""
    assert gate_lines(report(every_state().gates[1]), 70) == FAILING


def test_each_verdict_has_its_words():
    """What is inconclusive says that it does not pass."""
    first = [part.split("\n")[0] for part in gate_lines(every_state()).split("\n\nmodels/")]
    assert [line.partition(": ")[2] for line in first] == [
        "the gate passes",
        "the gate FAILS",
        "the gate is INCONCLUSIVE: it does not pass",
        "the gate passes",
    ]


@given(REPORTS)
def test_a_line_is_printable_and_every_finding_that_does_not_hold_is_shown(made):
    """Whatever the texts hold, nothing moves the cursor, and the number of findings is that of the lines."""
    text = gate_lines(made, 10**6)
    assert all(line.isprintable() for line in text.split("\n"))
    shown = [line for line in text.split("\n") if line.startswith(("fails: ", "undecided: ", "note: "))]
    expected = sum(one.state != "holds" for gate in made.gates for one in gate.findings)
    assert len(shown) >= expected  # a hostile name may begin like one


@pytest.mark.parametrize("width", [40, 60, 80, 120])
def test_no_line_is_wider_than_the_terminal(width):
    """From forty columns on; the words are the same at any width."""
    text = gate_lines(every_state(), width)
    assert max(map(len, text.split("\n"))) <= width
    assert sorted(text.split()) == sorted(gate_lines(every_state(), 1000).split()) or width == 40


@pytest.mark.parametrize(
    ("known", "shown"),
    [
        ({"low": 1.3, "estimate": 1.6, "high": 2.0}, "1.60 (1.30 to 2.00), at least 1.25: level 3"),
        ({"low": 1.2499, "estimate": 1.6, "high": 2.0}, "1.60 (1.2499 to 2.00), at least 1.25: level 3"),
        ({"low": 0.0, "estimate": 1.6, "high": 2.0}, "1.60 (0 to 2.00), at least 1.25: level 3"),
        ({"level": None, "low": 1.3}, "1.75 (1.30 to 2.00), at least 1.25: all levels"),
    ],
)
def test_the_nearest_claim_is_the_one_that_uses_up_most_of_its_limit(known, shown):
    """With figures that are not rounded across it."""
    far = finding(level=0)
    assert shown in gate_lines(report(entry(far, finding(**{"level": 3, **known}), far)))


def test_for_a_figure_with_a_most_the_upper_bound_counts():
    """The claim with the larger estimate is not the nearer one."""
    side = {"check": "bias", "limit": 1.0, "compared": "its shift, at most the limit"}
    wide, large = (
        finding(level=1, estimate=0.1, low=0.0, high=0.9, **side),
        finding(level=2, estimate=0.5, low=0.4, high=0.6, **side),
    )
    assert "0.100 (0 to 0.900), at most 1: level 1" in gate_lines(report(entry(wide, large)))


def test_a_gate_that_measured_nothing_says_what_the_policy_is_of():
    """Whatever machine it was held on."""
    text = gate_lines(report(entry(finding(), machine=None, same_machine=None)), 200)
    assert "\nthe policy is of Linux x86_64 (AVX2)\n" in text


def test_an_inconclusive_gate_says_how_it_is_decided():
    """With more paths, or by measuring at all; a fact and a figure that is not there no number of paths decides."""
    waits = finding("undecided", "bias", message="it is open")
    assert "to decide what is open: a larger most_paths under [gate] in models/reserve.toml" in gate_lines(
        report(entry(waits)), 200
    )
    assert "to decide what is open: the gate without --measured\n" in gate_lines(report(entry(waits, seed=None)), 200)
    unknown = finding("undecided", "branches", limit=None, estimate=None, low=None, high=None, compared=None)
    missing = finding("undecided", "gain", estimate=None, low=None, high=None)
    assert "a larger most_paths" in gate_lines(report(entry(replace(missing, paths_needed=4096))), 200)
    for other in (report(entry(unknown)), report(entry(missing)), report(entry(waits, finding("fails")))):
        assert "to decide what is open" not in gate_lines(other, 200)


def test_another_class_of_machine_is_named():
    """The policy's and this one's, where they differ."""
    other = MachinePart(system="Linux", machine="aarch64", vector_features=[])
    text = gate_lines(report(entry(finding(), machine=other, same_machine=False)), 200)
    assert "the policy is of Linux x86_64 (AVX2), this was measured on Linux aarch64 (no vector features)" in text


def test_a_hostile_name_stays_on_its_line():
    """Control characters and turns of the writing direction do not reach the terminal."""
    assert gate_lines(report(entry(audit=HOSTILE)), 1000).startswith("ab[31m")
