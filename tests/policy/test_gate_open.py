"""What a gate must not pass over: facts of the second stage, and whatever is not there to be compared."""

from types import SimpleNamespace

import msgspec
import pytest
from policy_records import AUDIT, changed, policy
from policy_records import run as audited

from narrowgauge.api import gate_held
from narrowgauge.measure.workers import Workers
from narrowgauge.policy.drawup import draw_up, write_policy
from narrowgauge.policy.gate import _sides, judge, second, verdict_of
from narrowgauge.policy.gatefile import held_to
from narrowgauge.policy.gatefinished import judge_finished
from narrowgauge.record.audit import RaisedEntry
from narrowgauge.record.gate import Place
from narrowgauge.record.policy import ParameterPart, SharePart
from narrowgauge.record.reach import LineCount

END = ("quantities", "end", "levels", 2)
ARM = ("quantities", "call", "levels", 2, "arms", "float16")


@pytest.fixture(scope="module")
def held(record):
    return policy(record)


def keys(findings, state):
    return {(one.check, one.level, one.quantity) for one in findings if one.state == state}


def test_a_fact_that_the_second_stage_alone_shows_fails(record, held):
    """A path that is not finite among the fresh draws is none the less one."""
    entry = record.quantities["call"].levels[2].arms["float16"]
    worse = changed(record, *ARM, "error_variance", to=4 * entry.error_variance)
    worse = changed(worse, *ARM, "error_variance_se", to=4 * entry.error_variance_se)
    found = second(judge(held, worse), judge(held, changed(record, *ARM, "nonfinite", to=1)))
    assert keys(found, "fails") == {("finite", 2, "call")}
    assert not any(one.check == "finite" and one.state == "holds" for one in found)


@pytest.mark.parametrize(
    ("steps", "checks"),
    [
        (("arms", "float16", "error_variance"), ["error variance"]),
        (("arms", "float16", "error_variance_se"), ["error variance"]),
        (("arms", "float16", "error_mean"), ["error mean"]),
        (("arms", "float32", "error_mean_se"), ["error mean"]),
        (("corrections", "float32:float64", "mean"), ["bias", "rmse"]),
        (("corrections", "float32:float64", "mean_se"), ["bias", "rmse"]),
        (("corrections", "float16:float32", "variance"), ["gain", "edge", "rmse"]),
        (("corrections", "float16:float64", "variance_se"), ["gain", "edge"]),
        (("arms", "float16", "edge"), ["edge"]),
        (("arms", "float16", "gain"), ["edge"]),
        (("reference", "level_variance_se"), ["gain", "edge", "rmse"]),
        (("telescoping", "difference"), ["levels"]),
        (("telescoping", "se"), ["levels"]),
    ],
)
def test_a_figure_that_a_fresh_audit_lacks_is_undecided(record, held, steps, checks):
    """What the policy claims is asked, whether or not there is an answer."""
    before = keys(judge(held, record), "undecided")
    found = judge(held, changed(record, *END, *steps, to=None))
    open_now = {one for one in keys(found, "undecided") - before if one[2] == "end"}
    assert {(check, level) for check, level, _ in open_now} == {
        (check, None if check == "rmse" else 2) for check in checks
    }
    assert verdict_of(found) == "inconclusive"


def test_levels_that_are_apart_for_certain_fail(record, held):
    """Without a standard error that is above 0 there is no chance by which they might."""
    for apart, state in ((0.001, "fails"), (0.0, "holds")):
        fresh = changed(record, *END, "telescoping", "se", to=0.0)
        found = judge(held, changed(fresh, *END, "telescoping", "difference", to=apart))
        assert ("levels", 2, "end") in keys(found, state)


@pytest.mark.parametrize(("mean", "state"), [(0.0, "holds"), (1e-4, "fails")])
def test_a_mean_error_where_the_policy_had_no_error_at_all_fails(record, held, mean, state):
    """All paths err by the same: the variance does not show it."""
    part = ("levels", 2, "measured", "end", "arms", "float16")
    without = held
    for name in ("mean", "mean_low", "mean_high", "variance", "variance_low", "variance_high"):
        without = changed(without, *part, f"error_{name}", to=0.0)
    fresh = record
    for name, value in (("variance", 0.0), ("variance_se", 0.0), ("mean", mean), ("mean_se", 0.0)):
        fresh = changed(fresh, *END, "arms", "float16", f"error_{name}", to=value)
    assert ("error mean", 2, "end") in keys(judge(without, fresh), state)


def test_a_budget_of_nothing_is_no_reason_not_to_ask(record, held):
    """Whether a bias is exactly 0 no sample can show."""
    found = judge(changed(held, "target", "bias_budget", "end", to=0.0), record)
    assert ("bias", 2, "end") in keys(found, "undecided")


def test_an_edge_without_an_upper_bound_holds_by_its_lower_one(record, held):
    """A record has no infinite figures."""
    assert ("edge", 2, "end") in keys(judge(held, record), "holds")
    found = judge(held, changed(record, *END, "arms", "float16", "edge_high", to=None))
    assert ("edge", 2, "end") in keys(found, "holds")


def test_what_was_to_be_counted_and_was_not_is_undecided(record, held):
    """Where nobody asked for it nothing is missing."""
    part = SharePart(share=0.008, low=0.006, high=0.01, operations=10**6)
    counted = changed(held, "levels", 2, "measured", "end", "arms", "float16", "lost_additions", to=part)
    levels = [SimpleNamespace(level=1, arms={})]
    for seen in (None, SimpleNamespace(watched=None), SimpleNamespace(watched=SimpleNamespace(levels=levels))):
        fresh = msgspec.structs.replace(record, range=seen)
        assert ("lost additions", 2, "end") in keys(judge(counted, fresh, counted=True), "undecided")
        assert not [one for one in judge(counted, fresh) if one.check == "lost additions"]


def test_a_kernel_that_raises_in_a_narrow_format_fails_at_its_line(record, held):
    """Nothing of that arm is measured then, and nothing is compared."""
    raised = RaisedEntry(type="ValueError", message="too far", file="model.py", line=8)
    fresh = record
    for name in record.quantities:
        steps = ("quantities", name, "levels", 2)
        fresh = changed(fresh, *steps, "arms", "float16", "raised", to=raised)
        kept = {
            pair: one for pair, one in fresh.quantities[name].levels[2].corrections.items() if "float16" not in pair
        }
        fresh = changed(fresh, *steps, "corrections", to=kept)
    (one,) = [one for one in judge(held, fresh) if one.state == "fails"]
    assert (one.check, one.level, one.arm, one.place) == ("run", 2, "float16", Place(file="model.py", line=8))
    assert one.message == "level 2: float16 raised ValueError: too far"


@pytest.mark.parametrize("missing", ["arm float32", "correction float32:float64", "correction float16:float32"])
def test_what_is_missing_on_one_level_alone_fails(record, held, missing):
    """Whichever quantity it is missing of."""
    kind, _, name = missing.partition(" ")
    steps = ("quantities", "call", "levels", 2, f"{kind}s")
    there = getattr(record.quantities["call"].levels[2], f"{kind}s")
    found = judge(held, changed(record, *steps, to={key: one for key, one in there.items() if key != name}))
    assert [one.message for one in found if one.state == "fails"] == [
        f"level 2: the audit has no {missing}, which the policy uses"
    ]


def test_a_kernel_that_is_no_longer_emulated_is_not_what_the_policy_is_of(record, held):
    """It rounds as it likes."""
    (one,) = [
        f
        for f in judge(held, changed(record, "arms", "float16", "rounding", to="the kernel's own"))
        if f.state == "fails"
    ]
    assert one.check == "run"
    assert "the rounding of float16 is the kernel's own in the audit and nearest in the policy" in one.message


def test_another_function_of_the_same_library_is_another_kernel(record, held):
    """The bytes of a library do not say which one is called."""
    source = changed(record.source, "covers", to="bytes")
    library = changed(changed(held, "kernel", "covers", to="bytes"), "kernel", "run", to="lib.so:value")
    for run, state in (("lib.so:value", "holds"), ("lib.so:other", "note")):
        fresh = msgspec.structs.replace(record, source=source, kernel=changed(record.kernel, "run", to=run))
        assert [one.state for one in judge(library, fresh) if one.check == "fingerprint"] == [state]


def test_a_line_in_another_file_where_values_leave_is_a_new_one(record, held):
    """Though there are as many as before."""
    known = changed(held, "evidence", "allowed_escapes", to=[LineCount(file="model.py", line=7, count=3)])
    fresh = changed(record, "reach", "allowed_escapes", to=[LineCount(file="other.py", line=7, count=3)])
    assert ("escapes", None, None) in keys(judge(known, fresh), "fails")


def test_branches_of_a_format_that_were_not_tried_are_undecided(record, held):
    """And what a branch of a format outside the policy raised is nobody's business."""
    assert ("branches", None, None) in keys(judge(held, changed(record, "branches", "tried", to=[])), "undecided")
    for arm, state in (("float16", "fails"), ("bfloat16", "holds")):
        found = judge(held, changed(record, "branches", "raised", to={arm: "no"}))
        assert [one.state for one in found if one.check == "branches"] == [state]


def test_a_mismatch_that_the_audit_file_accepts_is_a_note(record, held):
    """It is no proof to the bit."""
    one = SimpleNamespace(
        arm="float16", condition="branches", level=2, quantity="end", differing=3, paths=64, where=None,
        splits="within budget",
    )  # fmt: skip
    for splits, state in (("within budget", "note"), ("not admissible", "fails"), ("not concerned", "holds")):
        fresh = changed(record, "branches", "mismatches", to=[SimpleNamespace(**{**vars(one), "splits": splits})])
        assert [f.state for f in judge(held, fresh) if f.check == "branches"] == [state]


def of_checks(checks):
    return [SimpleNamespace(check=check) for check in checks]


@pytest.mark.parametrize(("claims", "boxed"), [(1, False), (104, False), (500, False), (104, True), (5000, True)])
def test_claims_and_corners_share_the_false_alarms_of_a_gate(record, held, claims, boxed):
    """1 in 10,000, over two stages, if each were just at its limit."""
    volatility = ParameterPart(low=0.2, high=0.4, scale="linear") if boxed else ParameterPart(fixed=0.3)
    claiming = changed(uncounted(held), "domain", "parameters", "volatility", to=volatility)
    each = _sides(claiming, record, of_checks(["gain"] * claims), alone=False).fails
    at_most = claims * each**2 + 4 * boxed * 1e-6
    assert at_most <= 1e-4 * (1 + 1e-12)
    assert at_most == pytest.approx(1e-4) or each == 1e-3


def uncounted(held):
    for level in range(4):
        for arm in ("float16", "float32"):
            for name in ("lost_additions", "subnormals"):
                held = changed(held, "levels", level, "measured", "end", "arms", arm, name, to=msgspec.UNSET)
    return held


def test_the_rates_are_the_same_before_shares_are_counted_and_corners_tried(record, held):
    """Else a claim that was decided while paths were drawn might be open in the end."""
    part = SharePart(share=0.008, low=0.006, high=0.01, operations=10**6)
    counted = changed(uncounted(held), "levels", 2, "measured", "end", "arms", "float16", "lost_additions", to=part)
    counted = changed(
        counted, "domain", "parameters", "volatility", to=ParameterPart(low=0.2, high=0.4, scale="linear")
    )
    before = _sides(counted, record, of_checks(["gain"] * 200), alone=False)
    assert before == _sides(counted, record, of_checks(["gain"] * 200 + ["lost additions"]), alone=False)
    assert before.fails < _sides(uncounted(held), record, of_checks(["gain"] * 200), alone=False).fails


@pytest.mark.parametrize(
    ("table", "key", "value"), [("kernel", "shared", ["tables"]), ("target", "largest_correction", 1e-9)]
)
def test_what_would_hide_an_error_is_a_setting_of_the_policy(record, held, table, key, value):
    """A module that is no longer rounded, and a bound that somebody declares; the policy was made without."""
    assert f"{table}.{key}" in held.assumed
    found = judge(held, changed(record, "asked", to={**record.asked, table: {**record.asked[table], key: value}}))
    assert keys(found, "fails") == {("settings", None, None)}


def test_a_cost_of_approximate_draws_is_a_setting_of_a_policy_that_has_one(record, held):
    """Its edges rest on it."""
    dear = changed(held, "cost", "approximate_draws", to=0.25)
    assert keys(judge(dear, record), "fails") == {("settings", None, None)}
    asked = {**record.asked, "cost": {**record.asked["cost"], "approximate_draws": 0.25}}
    assert not keys(judge(dear, changed(record, "asked", to=asked)), "fails")


def with_costs(record, **more):
    """A record of an audit with these settings of [cost]."""
    return changed(record, "asked", "cost", to={**record.asked["cost"], **more})


UNGIVEN = dict.fromkeys(("float64", "float32", "float16", "bfloat16"))


@pytest.mark.parametrize(
    ("now", "said"),
    [
        ({"measured": True, **UNGIVEN}, []),
        ({}, []),  # what was measured, given: so does a gate, which times nothing
        ({"measured": True, **UNGIVEN, "draws": 0.25}, ["cost.draws is 0.25"]),
        ({"measured": True, **UNGIVEN, "path": 0.25}, ["cost.path is 0.25"]),
        ({"measured": False, "float32": 0.3}, ["cost.measured is False in the audit file and True in the policy"]),
    ],
)
def test_measured_costs_are_measured_and_all_others_are_the_policys(record, held, now, said):
    """Costs of draws and paths are given, whoever measured those of a step."""
    timed = changed(held, "cost", "source", to="measured")
    failed = [one.message for one in judge(timed, with_costs(record, **now)) if one.check == "settings"]
    failed = [one for one in failed if one.startswith("cost.")]
    assert [one[: len(text)] for one, text in zip(failed, said, strict=True)] == said


def test_given_costs_are_not_measured_ones(record, held):
    """Figures at the costs of a machine say nothing of those that the policy was drawn up with."""
    (one,) = [one for one in judge(held, with_costs(record, measured=True, **UNGIVEN)) if one.state == "fails"]
    assert one.message == "cost.measured is True in the audit file and False in the policy"


OWN = """
import numpy as np

def value(dW, h, *, rate, volatility, strike):
    one = dW.dtype.type
    x = np.ones(dW.shape[1], dW.dtype)
    for dw in dW:
        x = x + (one(rate * h) * x + one(volatility) * x * dw)
    return {"end": x, "call": np.maximum(x - one(strike), one(0.0))}
"""
MEASURED = "[cost]\nmeasured = true\ndraws = 0.125\n\n"


def test_a_gate_takes_measured_costs_from_the_policy_and_holds_the_given_ones(tmp_path):
    """It times nothing, which is no other setting; what a draw costs is one, also in a finished audit."""
    text = AUDIT[: AUDIT.index("[cost]")] + MEASURED + AUDIT[AUDIT.index("[sampling]") :]
    text = text.replace("[parameters]", 'rounds = "itself"\n\n[parameters]')
    text = text.replace('schemes = ["split"]', 'narrow = ["float16"]\nwide = ["float32"]')
    text += "\n[gate]\npaths = 1024\nmost_paths = 1024\n"
    document = draw_up(*audited(tmp_path, text, OWN))
    write_policy(document, tmp_path / "audit.policy.json")
    assert document.cost.source == "measured"
    audit = tmp_path / "audit.toml"
    for state in ("holds", "fails"):
        entries = gate_held(held_to(audit), who=Workers()), judge_finished(held_to(audit), tmp_path / "out")
        for entry in entries:
            assert {one.state for one in entry.findings if one.check == "settings"} >= {state}
            assert (entry.verdict == "fail") == (state == "fails")
        audit.write_text(text.replace("draws = 0.125", "draws = 0.25"), encoding="utf-8")
