"""What the terminal says of a domain: every scenario that fails by name, what is claimed, what that proves."""

from __future__ import annotations

import io

import pytest
from msgspec.structs import replace
from rendering import HOSTILE, flat, rendered
from rich.console import Console, Group
from rich.text import Text

from narrowgauge.record.domain import (
    ClaimedEntry,
    DomainEntry,
    DomainLevelEntry,
    ProofEntry,
    ScenarioEntry,
    ScenarioLevelEntry,
    SideEntry,
    SpanEntry,
)
from narrowgauge.record.plan import SchemeEntry
from narrowgauge.report.domain import deciding, domain_notes, domain_table
from narrowgauge.report.progress import Progress

SCHEME = SchemeEntry(kind="split", narrow="float16", wide="float64")
PASSED = ("passes", None)


def scenario(number: int, spot: float, outcome: tuple[str, str | None] = PASSED, **fields: object) -> ScenarioEntry:
    word, reason = outcome
    level = ScenarioLevelEntry(
        level=0,
        outcome=word,
        reason=reason,
        paths=1024,
        edge=2.0,
        edge_low=1.9,
        edge_high=2.1,
        bias=0.0,
        bias_low=0.0,
        bias_high=0.0,
        paths_needed=None,
    )
    made = ScenarioEntry(
        number=number,
        kind="drawn" if number < 4 else "corner",
        parameters={"spot": spot},
        outcome=word,
        reason=reason,
        level=None if outcome == PASSED else 0,
        message=None,
        levels=[level],
    )
    return replace(made, **fields)


def domain(*scenarios: ScenarioEntry, claimed: ClaimedEntry | None, proof: ProofEntry) -> DomainEntry:
    level = DomainLevelEntry(
        level=0, scheme=SCHEME, outcome="refused", reason="nonfinite", edge_low=0.9996, decided_by=5, arms={}
    )
    return DomainEntry(
        sides={"spot": SideEntry(low=50.0, high=1e5, scale="log", audited=100.0)},
        confidence=0.99,
        path_steps=1,
        share_of_audit=0.25,
        levels=[level],
        claimed=claimed,
        proof=proof,
        scenarios=list(scenarios),
    )


PART = ClaimedEntry(parameters={"spot": SpanEntry(low=50.0, high=61234.9)}, share=0.9352, scenarios=3, levels=[])
PROOF = ProofEntry(confidence=0.95, drawn=32, passed=32, fails_below=1 - 0.05 ** (1 / 32), claimed_fails_below=0.0956)
CASE = domain(
    scenario(1, 77.0),
    scenario(2, 60.0, ("undecided", "budget")),
    scenario(3, 5e4, ("refused", "reference"), message=f"level 0, arm float64: the kernel raised {HOSTILE}"),
    scenario(4, 50.0),
    scenario(5, 1e5, ("refused", "nonfinite")),
    claimed=PART,
    proof=PROOF,
)


def shown(entry: DomainEntry, width: int = 80) -> str:
    return flat(Group(*map(Text, domain_notes(entry)), domain_table(entry), *map(Text, deciding(entry))), width)


def test_every_scenario_that_fails_is_named() -> None:
    """With its parameters, where it fails, and why; those that pass are counted."""
    text = shown(CASE, 200)
    assert "Of 3 drawn scenarios and 2 corners, 2 pass, 2 are refused and 1 is undecided." in text
    assert "scenario 2 (spot = 60.00) is undecided on level 0: paths ran out." in text
    assert "scenario 3 (spot = 50,000) is refused, the kernel cannot do it: level 0, arm float64:" in text
    assert "corner 5 (spot = 100,000) is refused on level 0: non-finite values." in text
    assert "scenario 1 (" not in text


def test_what_is_claimed_never_looks_larger_than_it_is() -> None:
    """Ends are rounded inwards, and an upper bound of what fails is rounded up: 8.938% to 8.94%."""
    text = shown(CASE, 200)
    assert "claimed for spot from 50.00 to 61,234.9: 93.5% of the box" in text
    assert "With 95% confidence less than 8.94% of the box fails: 32 of 32 drawn scenarios pass." in text
    assert "Of what is claimed that is less than 9.56%." in text
    assert "0.9996" in text


def test_the_scenario_that_decides_a_level_is_named() -> None:
    """In the table by its number, below it with its parameters."""
    text = shown(CASE, 200)
    assert "0 float16 with float64 0.9996 refused: non-finite values corner 5 corner 5 (spot = 100,000)" in text


def test_nothing_claimed_and_all_claimed_are_said() -> None:
    """In words, without a share."""
    none = replace(CASE, claimed=None)
    assert "Nothing is claimed: a scenario at the audited point itself does not pass." in shown(none, 200)
    whole = replace(CASE, claimed=replace(PART, parameters={"spot": SpanEntry(low=50.0, high=1e5)}, share=1.0))
    assert "The verdict is claimed for the whole box." in shown(whole, 200)
    assert "Of what is claimed" not in shown(whole, 200)


def test_a_box_without_a_scenario_is_not_claimed() -> None:
    """As in the policy, the audited point alone is."""
    point = {"spot": SpanEntry(low=50.0, high=100.0)}
    text = shown(replace(CASE, claimed=replace(PART, parameters=point, scenarios=0)), 200)
    assert "The verdict is claimed for the audited point alone: no scenario that passes lies in what the others" in text
    assert "of its scales" not in text
    assert "only ones that pass; 1 scenario lies in it." in shown(
        replace(CASE, claimed=replace(PART, scenarios=1)), 200
    )


def test_many_that_fail_are_cut_short() -> None:
    """The first five are named, the others counted."""
    many = replace(CASE, scenarios=[scenario(number, 1e5, ("refused", "bias")) for number in range(1, 10)])
    assert shown(many, 200).count("is refused on level 0: bias too large") == 5
    assert "4 more do not pass; audit.json has them all." in shown(many, 200)


def test_a_bar_follows_each_look() -> None:
    """It says how many scenarios draw more paths."""
    stream = io.StringIO()
    console = Console(file=stream, width=80, force_terminal=True, _environ={"TERM": "xterm"})
    with Progress(quiet=True, console=console) as watcher:
        watcher.scenarios(1, 5, 36, 100)
        watcher.advanced(100)
        watcher.scenarios(2, 5, 1, 100)
        watcher.advanced(100)
    assert "look 1 of 5, 36 scenarios" in stream.getvalue()
    assert "look 2 of 5, 1 scenario " in stream.getvalue()


@pytest.mark.parametrize("width", [40, 80, 120])
def test_no_control_character_reaches_the_terminal(width: int) -> None:
    """Whatever the kernel raised, at any width."""
    text = rendered(Group(*map(Text, domain_notes(CASE)), domain_table(CASE)), width)
    assert not [character for character in text if not character.isprintable() and character != "\n"]
