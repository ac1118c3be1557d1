"""Small runs of the studies of the gate's false alarms and of its power."""

import json
from pathlib import Path

import gate_false_alarms as alarms
import gate_power as power
import pytest


@pytest.fixture(scope="module")
def audit(tmp_path_factory):
    """The reserve example on its short ladder."""
    return power.cases.prepared("reserve", tmp_path_factory.mktemp("gates") / "audit")


def test_gates_of_the_unchanged_kernel_pass_and_are_not_held_twice(audit, tmp_path, monkeypatch):
    """What is kept is gone on with."""
    kept = tmp_path / "kept.jsonl"
    first = alarms.gates("short", audit, range(3), kept)
    assert [one["verdict"] for one in first] == ["pass"] * 3
    monkeypatch.setattr(alarms.cases, "gated", None)
    assert alarms.gates("short", audit, range(3), kept) == first
    assert len(kept.read_text().splitlines()) == 3


@pytest.mark.parametrize(
    "words", [[], ["kept", "5"], ["kept", "5", "5"], ["kept", "5", "5", "5", "5"], ["kept", *"55x"]]
)
def test_a_study_that_was_asked_for_wrongly_holds_no_gate(words):
    """It says so at once, not after all of them; a number for each audit file, or none at all."""
    with pytest.raises(SystemExit, match="KEPT GATES GATES GATES"):
        alarms.asked_for(words)
    assert alarms.asked_for(["kept", *"567"]) == (Path("kept"), [5, 6, 7])
    assert alarms.asked_for(["kept"]) == (Path("kept"), [alarms.GATES] * 3)


def test_as_many_may_fail_as_the_design_allows():
    """One of a thousand, and ten that are open."""
    runs = [{"verdict": verdict} for verdict in ["fail"] + ["inconclusive"] * 10 + ["pass"] * 989]
    assert alarms.may(runs)
    assert not alarms.may([*runs, {"verdict": "fail"}])
    assert not alarms.may([*runs, {"verdict": "inconclusive"}])


def test_a_mistake_is_told_with_the_checks_that_saw_it(tmp_path, monkeypatch):
    """And with the least margin of a check that saw it every time; a fact has none."""
    name = "reserve: a payoff in cents"
    monkeypatch.setattr(power.cases, "MISTAKES", {name: power.cases.MISTAKES[name]})
    kept = tmp_path / "kept.jsonl"
    found = power.gates(tmp_path / "one", kept, 2)
    assert power.row(name, found[name]) == f"| {name} | 2 of 2 | finite 2 | a fact |"
    assert [json.loads(line)["verdict"] for line in kept.read_text().splitlines()] == ["fail", "fail"]
    runs = [{"verdict": "fail", "caught": {"gain": 3.0, "edge": 5.0}}, {"verdict": "fail", "caught": {"gain": 2.5}}]
    assert power.row("so", runs) == "| so | 2 of 2 | gain 2, edge 1 | 2.5 |"
