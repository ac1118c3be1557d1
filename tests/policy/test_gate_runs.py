"""Whole gates of the examples: an unchanged kernel passes, and every mistake is caught."""

import json
import os
import subprocess
import sys
from pathlib import Path

import gate_cases as cases
import numpy as np
import pytest

from narrowgauge.api import gate_held
from narrowgauge.measure.workers import Workers
from narrowgauge.policy.gatefile import held_to

HERE = Path(__file__).parent
SEEDS = range(50)


@pytest.fixture(scope="module")
def audits(tmp_path_factory):
    """The audit file of each base with its policy, made when it is asked for."""
    found = {}

    def made(base):
        if base not in found:
            found[base] = cases.prepared(base, tmp_path_factory.mktemp(base) / "audit")
        return found[base]

    return made


def changed(audit, folder, *changes):
    """A copy of an audit file with its policy and its kernel, in which texts were replaced."""
    return cases.with_mistake(audit, cases.Mistake(base="reserve", changes=changes, checks=()), folder / "changed")


@pytest.mark.parametrize("base", cases.BASES)
def test_an_unchanged_kernel_passes(base, audits):
    """With the draws that follow from its policy; the kernel's line is named."""
    entry = cases.gated(audits(base))
    assert entry.verdict == "pass", [one.message for one in entry.findings if one.state != "holds"]
    lines = (audits(base).parent / entry.place.file).read_text(encoding="utf-8").splitlines()
    assert lines[entry.place.line - 1].startswith("def ")
    assert entry.same_machine


@pytest.mark.parametrize("name", cases.MISTAKES)
def test_a_mistake_is_caught(name, audits, tmp_path):
    """By one of the checks that are there for it, and the kernel is said to have changed.

    Predicted power: above .9999 each, see reports/gate_power.md.
    """
    mistake = cases.MISTAKES[name]
    entry = cases.gated(cases.with_mistake(audits(mistake.base), mistake, tmp_path / "changed"))
    assert entry.verdict == "fail"
    failed = {one.check for one in entry.findings if one.state == "fails"}
    assert failed & set(mistake.checks), failed
    if not failed & {"run", "escapes"}:
        assert [one.state for one in entry.findings if one.check == "fingerprint"] == ["note"]


def test_a_kernel_that_raises_in_half_precision_alone_fails_at_its_line(audits, tmp_path):
    """No figure of that format is there to be compared, and the reference is sound."""
    old = "    saved = np.exp(x) * np.maximum(q, 0.0) - fee\n"
    audit = changed(audits("reserve"), tmp_path, (old, f"{old}    if np.isinf(saved * 1e4).any():\n        1 / 0\n"))
    entry = cases.gated(audit)
    (one, *_) = failed = [one for one in entry.findings if one.state == "fails"]
    assert {one.check for one in failed} == {"run"}
    assert "float16 raised ZeroDivisionError" in one.message
    lines = (audit.parent / one.place.file).read_text(encoding="utf-8").splitlines()
    assert lines[one.place.line - 1] == "        1 / 0"


@pytest.mark.parametrize("watch", ["true", "false"])
def test_lost_additions_and_subnormals_are_counted_where_somebody_wants_it(watch, audits, tmp_path):
    """On the levels on which the policy has them."""
    audit = changed(audits("reserve"), tmp_path)
    with audit.open("a", encoding="utf-8") as file:
        file.write(f"\n[gate]\nwatch = {watch}\n")
    entry = cases.gated(audit)
    assert entry.verdict == "pass"
    counted = {one.level for one in entry.findings if one.check == "lost additions"}
    assert counted == ({0, 2, 3} if watch == "true" else set())
    assert counted == {one.level for one in entry.findings if one.check == "subnormals"}


def test_fifty_gates_of_the_unchanged_example_pass(audits):
    """None fails.

    False alarms: designed at 1 in 10,000 a gate, so that one of fifty fails in 1 of 200 choices of seeds at most.
    """
    verdicts = [cases.gated(audits("reserve"), seed=seed).verdict for seed in SEEDS]
    assert "fail" not in verdicts
    assert verdicts.count("inconclusive") <= 1


def test_the_same_gate_gets_the_same_answer_from_any_workers(audits):
    """Draws follow from the policy's seed: here and in two processes the figures are the same, bit for bit."""
    held = held_to(audits("reserve"))
    here, there = (gate_held(held, who=who) for who in (Workers(), Workers(number=2)))
    assert here == there
    assert here.seed == held.policy.evidence.seed
    assert here != gate_held(held, seed=99, who=Workers())


def test_a_comment_leaves_the_kernel_what_it_was(audits, tmp_path):
    """The fingerprint is of syntax trees: no note."""
    comment = cases.Mistake(
        base="reserve", changes=(("    span = steps * h\n", "    span = steps * h  # so\n"),), checks=()
    )
    entry = cases.gated(cases.with_mistake(audits("reserve"), comment, tmp_path / "changed"))
    assert {one.state for one in entry.findings} == {"holds"}


@pytest.mark.parametrize(("stale", "verdict"), [("note", "pass"), ("fail", "fail")])
def test_a_harmless_change_is_what_stale_says(stale, verdict, audits, tmp_path):
    """The policy is older than its kernel, and everything still holds."""
    audit = changed(audits("reserve"), tmp_path, ("    span = steps * h\n", "    span = h * steps\n"))
    with audit.open("a", encoding="utf-8") as file:
        file.write(f'\n[gate]\nstale = "{stale}"\n')
    assert cases.gated(audit).verdict == verdict


def test_other_settings_than_the_policys_are_not_measured(audits, tmp_path):
    """A volatility that was changed in the audit file, without a new policy, fails at once."""
    audit = changed(audits("reserve"), tmp_path)
    text = audit.read_text(encoding="utf-8")
    audit.write_text(text.replace("price_volatility = 0.35", "price_volatility = 0.7"), encoding="utf-8")
    entry = cases.gated(audit)
    assert entry.verdict == "fail"
    assert [one.check for one in entry.findings] == ["settings"]
    assert entry.paths == []


def test_a_budget_that_ends_is_inconclusive_and_says_what_is_missing(audits, tmp_path):
    """With 1,024 paths nothing of the bias is known."""
    audit = changed(audits("reserve"), tmp_path)
    with audit.open("a", encoding="utf-8") as file:
        file.write("\n[gate]\npaths = 1024\nmost_paths = 1024\n")
    entry = cases.gated(audit)
    assert entry.verdict == "inconclusive"
    waiting = [one for one in entry.findings if one.state == "undecided"]
    assert "bias" in {one.check for one in waiting}
    assert all(one.paths_needed is None or one.paths_needed > 1024 for one in waiting)
    assert any(one.paths_needed is not None for one in waiting)


def dispatched():
    """The features of this processor that NumPy can be told to leave alone."""
    return list(np.show_config(mode="dicts")["SIMD Extensions"].get("found", []))


@pytest.mark.skipif(not dispatched(), reason="this processor has no features that NumPy could leave alone")
def test_the_same_kernel_passes_where_numpy_may_use_less_of_the_processor(audits):
    """float32 and float64 exp and log give other bits then; that the policy is of another class of machine is said."""
    code = (
        "import json, sys\n"
        "from pathlib import Path\n"
        "sys.path.insert(0, sys.argv[1])\n"
        "import gate_cases as cases\n"
        "entry = cases.gated(Path(sys.argv[2]))\n"
        "from narrowgauge.record.gate import report_of\n"
        "from narrowgauge.report.gate import gate_lines\n"
        "print(json.dumps([entry.verdict, entry.same_machine, gate_lines(report_of([entry], 'narrowgauge'))]))\n"
    )
    env = {**os.environ, "NPY_DISABLE_CPU_FEATURES": ",".join(dispatched())}
    run = [sys.executable, "-c", code, str(HERE), str(audits("reserve"))]
    done = subprocess.run(run, check=True, capture_output=True, text=True, env=env)
    verdict, same, text = json.loads(done.stdout)
    assert verdict == "pass"
    assert same is False
    assert "another class of machine" in " ".join(text.split())
