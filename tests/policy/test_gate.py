"""The verdict of a gate: a pure function of a policy and a fresh record."""

import subprocess
import sys
from types import SimpleNamespace

import msgspec
import pytest
from policy_records import changed, policy

from narrowgauge.policy.gate import concerned, fails_for_now, judge, levels_open, second, verdict_of
from narrowgauge.record.gate import EXIT_CODES, Finding, report_of
from narrowgauge.record.plan import SchemeEntry
from narrowgauge.record.policy import ParameterPart, SharePart
from narrowgauge.record.reach import LineCount

ARM = ("quantities", "call", "levels", 2, "arms", "float16")


@pytest.fixture(scope="module")
def held(record):
    return policy(record)


def finding(state, check="gain", **more):
    return Finding(check=check, level=more.pop("level", None), quantity=None, arm=None, state=state, message="", **more)


def failing(findings):
    return {(one.check, one.level, one.quantity) for one in findings if one.state == "fails"}


def open_of(findings):
    return {(one.check, one.level, one.quantity) for one in findings if one.state == "undecided"}


@pytest.mark.parametrize(
    ("states", "verdict"),
    [
        ((), "pass"),
        (("holds", "note"), "pass"),
        (("holds", "undecided"), "inconclusive"),
        (("undecided", "fails"), "fail"),
        (("holds", "fails"), "fail"),
    ],
)
def test_the_verdict_is_that_of_the_truth_table(states, verdict):
    """Any failure fails; without one anything undecided is inconclusive; a note is neither."""
    assert verdict_of(finding(state) for state in states) == verdict


@pytest.mark.parametrize(
    ("verdicts", "worst", "code"),
    [
        (("pass", "pass"), "pass", 0),
        (("pass", "inconclusive"), "inconclusive", 3),
        (("inconclusive", "fail", "pass"), "fail", 1),
    ],
)
def test_the_worst_of_several_verdicts_is_the_exit_code(verdicts, worst, code, held, record):
    """What failed comes before what is open, and that before what passed."""
    made = [entry_with(verdict) for verdict in verdicts]
    report = report_of(made, "narrowgauge")
    assert (report.verdict, report.exit_code) == (worst, code)
    assert EXIT_CODES[worst] == code


def entry_with(verdict):
    from narrowgauge.record.gate import GateEntry, Place

    return GateEntry(
        audit="a.toml",
        policy="a.policy.json",
        kernel="a.py:f",
        place=Place(file="a.py", line=1),
        verdict=verdict,
        findings=[],
        seed=1,
        paths=[],
        policy_machine=None,
        machine=None,
        same_machine=None,
        renew="",
    )


def test_a_record_supports_the_policy_that_was_drawn_up_from_it(record, held):
    """Nothing of a record fails against its own policy."""
    assert not failing(judge(held, record))
    assert verdict_of(judge(held, record, alone=True)) != "fail"


def test_every_level_and_quantity_has_its_claims(record, held):
    """Error variance, mean, gain and edge of each level and quantity; one root-mean-square error a quantity."""
    found = judge(held, record)
    for check in ("error variance", "gain", "edge", "bias"):
        assert {(one.level, one.quantity) for one in found if one.check == check} == {
            (level, name) for level in range(4) for name in ("end", "call")
        }
    assert [(one.level, one.quantity) for one in found if one.check == "rmse"] == [(None, "end"), (None, "call")]


@pytest.mark.parametrize(("times", "state"), [(1.0, "holds"), (4.0, "fails")])
def test_an_error_variance_that_has_grown_fails(record, held, times, state):
    """Four times the policy's is above 1.5 times its bound, and the same is not."""
    entry = record.quantities["call"].levels[2].arms["float16"]
    fresh = changed(record, *ARM, "error_variance", to=entry.error_variance * times)
    fresh = changed(fresh, *ARM, "error_variance_se", to=entry.error_variance_se * times)
    (one,) = [
        f
        for f in judge(held, fresh)
        if (f.check, f.level, f.quantity, f.arm) == ("error variance", 2, "call", "float16")
    ]
    assert one.state == state
    assert one.limit == 1.5
    assert one.low < one.estimate < one.high


def test_the_limit_is_2_where_few_paths_carry_the_correction(record, held):
    """Below an effective size of 200 a variance is known too badly for 1.5."""
    fresh = changed(
        record, "quantities", "call", "levels", 2, "corrections", "float16:float64", "effective_size", to=150.0
    )
    limits = {
        f.level: f.limit
        for f in judge(held, fresh)
        if (f.check, f.quantity, f.arm) == ("error variance", "call", "float16")
    }
    assert limits[2] == 2.0
    assert limits[1] == 1.5


def test_an_error_variance_with_too_wide_an_interval_is_undecided(record, held):
    """It says how many paths of the level it needs, more than there are."""
    entry = record.quantities["call"].levels[2].arms["float16"]
    fresh = changed(record, *ARM, "error_variance_se", to=entry.error_variance * 0.3)
    found = judge(held, fresh)
    (one,) = [f for f in found if f.state == "undecided" and f.check == "error variance"]
    assert (one.level, one.quantity) == (2, "call")
    assert one.paths_needed > record.quantities["call"].levels[2].paths
    assert f"{one.paths_needed:,} paths of the level" in one.message
    assert levels_open(found, range(4)) == [2]


def test_a_mean_error_that_has_grown_fails(record, held):
    """Also where the variance has not: half the error's standard deviation is no longer a chance."""
    entry = record.quantities["end"].levels[1].arms["float16"]
    grown = entry.error_variance**0.5 / 2
    fresh = changed(record, "quantities", "end", "levels", 1, "arms", "float16", "error_mean", to=grown)
    assert failing(judge(held, fresh)) == {("error mean", 1, "end")}


def test_a_bias_past_the_budget_fails(record, held):
    """The shift of the mean by the widest arm of the scheme is what counts."""
    budget = held.target.bias_budget["end"]
    steps = ("quantities", "end", "levels", 3, "corrections", "float32:float64")
    assert ("bias", 3, "end") in failing(judge(held, changed(record, *steps, "mean", to=3 * budget)))
    assert ("bias", 3, "end") not in failing(judge(held, changed(record, *steps, "mean", to=budget / 2)))


def test_a_gain_that_has_fallen_fails(record, held):
    """A correction that varies ten times as much costs what it costs, and the gain is worked out anew from it."""
    steps = ("quantities", "end", "levels", 3, "corrections", "float16:float32")
    entry = record.quantities["end"].levels[3].corrections["float16:float32"]
    fresh = changed(record, *steps, "variance", to=10 * entry.variance)
    fresh = changed(fresh, *steps, "variance_se", to=10 * entry.variance_se)
    assert ("gain", 3, "end") in failing(judge(held, fresh))


def test_the_fresh_gain_follows_from_the_costs(record, held):
    """Variance times cost of float64, over the square of the sum of the roots of those of the branches."""
    for one in judge(held, record):
        if one.check != "gain":
            continue
        level = record.quantities[one.quantity].levels[one.level]
        steps = level.steps * (1.5 if one.level else 1)
        fixed = 0.125 * level.steps + 0.5
        low = level.arms["float16"].level_variance * (0.25 * steps + fixed)
        correction = level.corrections["float16:float32"].variance * (0.75 * steps + fixed)
        today = level.reference.level_variance * (steps + fixed)
        assert one.estimate == pytest.approx(today / (low**0.5 + correction**0.5) ** 2)


def test_the_edge_is_brought_to_the_policys_scheme(record, held):
    """Where the fresh audit weighs a scheme of half the gain, its edge counts twice."""
    entry = record.quantities["end"].levels[1].arms["float16"]
    other = SchemeEntry(kind="split", narrow="float16", wide="float64")
    steps = ("quantities", "end", "levels", 1, "arms", "float16")
    fresh = record
    for name, value in (("scheme", other), ("gain", entry.gain / 2), ("edge", entry.edge / 2)):
        fresh = changed(fresh, *steps, name, to=value)
    fresh = changed(fresh, *steps, "edge_low", to=entry.edge_low / 2)
    fresh = changed(fresh, *steps, "edge_high", to=entry.edge_high / 2)
    assert ("edge", 1, "end") not in failing(judge(held, fresh))


def test_a_variance_of_the_levels_that_has_grown_fails_the_target(record, held):
    """Seventeen times the variance with the planned paths is four times the error."""
    fresh = record
    for level in range(4):
        entry = record.quantities["end"].levels[level].arms["float16"]
        steps = ("quantities", "end", "levels", level, "arms", "float16", "level_variance")
        fresh = changed(fresh, *steps, to=17 * entry.level_variance)
    assert ("rmse", None, "end") in failing(judge(held, fresh))
    assert ("rmse", None, "call") not in failing(judge(held, fresh))


def test_levels_that_do_not_fit_together_fail(record, held):
    """Seven standard errors between the means of coarse and fine paths are no chance, three are."""
    steps = ("quantities", "end", "levels", 2, "telescoping")
    se = record.quantities["end"].levels[2].telescoping.se
    assert ("levels", 2, "end") in failing(judge(held, changed(record, *steps, "difference", to=7 * se)))
    assert ("levels", 2, "end") not in failing(judge(held, changed(record, *steps, "difference", to=-3 * se)))


def test_a_value_that_is_not_finite_fails_at_once(record, held):
    """It is a fact: no second stage asks whether it comes again, and no other paths are drawn."""
    fresh = changed(record, *ARM, "nonfinite", to=1)
    found = judge(held, fresh)
    assert failing(found) == {("finite", 2, "call")}
    assert not fails_for_now(found)
    assert levels_open([*found, finding("undecided", level=1)], range(4)) == []


def test_a_format_outside_the_policy_may_do_what_it_likes(record, held):
    """bfloat16 is used on no level."""
    fresh = changed(record, "quantities", "call", "levels", 2, "arms", "bfloat16", "nonfinite", to=5)
    assert not failing(judge(held, fresh))


@pytest.mark.parametrize(("stale", "state", "verdict"), [("note", "note", "pass"), ("fail", "fails", "fail")])
def test_a_policy_older_than_its_kernel_is_what_stale_says(record, held, stale, state, verdict):
    """A note or a failure, where everything still holds."""
    fresh = msgspec.structs.replace(record, source=changed(record.source, "fingerprint", to="sha256:" + "1" * 64))
    found = [one for one in judge(held, fresh, stale=stale, alone=True) if one.check == "fingerprint"]
    assert [one.state for one in found] == [state]
    assert verdict_of(found) == verdict
    assert "renew the policy" in found[0].message


@pytest.mark.parametrize(
    ("steps", "value", "said"),
    [
        (("parameters", "volatility"), 0.4, "parameters.volatility is 0.4 in the audit file and 0.3 in the policy"),
        (("ladder", "horizon"), 2.0, "ladder.horizon is 2.0"),
        (("target", "rmse"), {"end": 0.002, "call": 0.01}, "target.rmse, call, is 0.01"),
        (("cost", "float16"), 0.5, "cost.float16 is 0.5"),
        (("formats", "today"), "float32", "formats.today is float32"),
    ],
)
def test_settings_that_are_not_the_policys_fail_and_nothing_is_compared(record, held, steps, value, said):
    """Figures of other settings say nothing of the policy's."""
    found = judge(held, changed(record, "asked", *steps, to=value))
    assert {one.check for one in found if one.state == "fails"} == {"settings"}
    assert said in next(one.message for one in found if one.state == "fails")
    assert not any(one.check == "gain" for one in found)


def test_a_parameter_inside_the_audited_box_is_a_setting_of_the_policy(record, held):
    """A policy for a box of parameters holds for all of them."""
    box = changed(held, "domain", "parameters", "volatility", to=ParameterPart(low=0.1, high=0.5, scale="linear"))
    assert not failing(judge(box, changed(record, "asked", "parameters", "volatility", to=0.4)))
    assert ("settings", None, None) in failing(judge(box, changed(record, "asked", "parameters", "volatility", to=0.6)))


def test_a_new_line_where_values_leave_fails_and_one_that_moved_does_not(record, held):
    """An edit above a line gives it another number."""
    one, other = (LineCount(file="model.py", line=line, count=3) for line in (7, 9))
    known = changed(held, "evidence", "allowed_escapes", to=[one])
    assert not failing(judge(known, changed(record, "reach", "allowed_escapes", to=[other])))
    found = judge(known, changed(record, "reach", "allowed_escapes", to=[one, other]))
    assert failing(found) == {("escapes", None, None)}
    assert "model.py:9" in next(f.message for f in found if f.state == "fails")


@pytest.mark.parametrize(("low", "state"), [(0.0124, "holds"), (0.0126, "fails")])
@pytest.mark.parametrize("names", [("lost additions", "lost_additions", "lost"), ("subnormals", "subnormals", "below")])
def test_a_share_fails_where_its_lower_bound_is_above_one_and_a_quarter_of_the_policys_upper(
    record, held, low, state, names
):
    """Where both have counted; once for all quantities."""
    check, known, fresh = names
    part = SharePart(share=0.008, low=0.006, high=0.01, operations=10**6)
    counted = changed(held, "levels", 2, "measured", "end", "arms", "float16", known, to=part)
    none = SimpleNamespace(share=None)
    share = SimpleNamespace(share=0.013, share_low=low, share_high=0.014)
    arm = SimpleNamespace(**{"lost": none, "below": none, fresh: share})
    levels = [SimpleNamespace(level=2, arms={"float16": arm, "bfloat16": arm})]
    found = judge(
        counted, msgspec.structs.replace(record, range=SimpleNamespace(watched=SimpleNamespace(levels=levels)))
    )
    assert [(one.check, one.level, one.arm, one.state) for one in found if one.check == check] == [
        (check, 2, "float16", state)
    ]
    unwatched = changed(record, "range", "watched", to=None)
    assert not [one for one in judge(counted, unwatched) if one.check == check]


def test_splits_without_a_comparison_of_branches_are_undecided(record, held):
    """What was not tried does not pass."""
    found = judge(held, changed(record, "branches", to=None))
    assert ("branches", None, None) in open_of(found)
    assert levels_open([one for one in found if one.check == "branches"], range(4)) == []


@pytest.mark.parametrize(
    ("drop", "said"), [("float16", "has no float16"), ("float16:float32", "no correction float16")]
)
def test_an_audit_without_what_the_policy_uses_fails(record, held, drop, said):
    """Nothing can be said of an arm or of a correction that was not measured."""
    if drop in record.arms:
        fresh = changed(record, "arms", to={name: one for name, one in record.arms.items() if name != drop})
    else:
        pairs = record.quantities["end"].levels[0].corrections
        less = {name: one for name, one in pairs.items() if name != drop}
        fresh = changed(record, "quantities", "end", "levels", 0, "corrections", to=less)
    (one,) = [f for f in judge(held, fresh) if f.state == "fails"]
    assert one.check == "run"
    assert said in one.message


def test_a_claim_that_failed_once_fails_only_if_it_fails_again(record, held):
    """The second stage replaces claims that failed, and nothing else."""
    entry = record.quantities["call"].levels[2].arms["float16"]
    worse = changed(record, *ARM, "error_variance", to=4 * entry.error_variance)
    worse = changed(worse, *ARM, "error_variance_se", to=4 * entry.error_variance_se)
    first, good = judge(held, worse), judge(held, record)
    assert fails_for_now(first)
    assert not failing(second(first, good))
    again = second(first, judge(held, worse))
    assert failing(again) == failing(first) == {("error variance", 2, "call")}
    assert [one.stages for one in again if one.state == "fails"] == [2]
    assert sum(one.stages for one in again) == len(again) + 1


def test_a_second_stage_is_run_for_the_claims_that_failed(record, held):
    """What was undecided before gets no more paths there."""
    failed, open_claim = finding("fails", level=2), finding("undecided", level=1)
    fresh = [finding("undecided", level=2), finding("undecided", level=1)]
    assert levels_open(concerned(fresh, [failed, open_claim]), range(4)) == [2]
    assert levels_open(concerned(fresh, []), range(4)) == [1, 2]


def test_a_claim_on_all_levels_needs_paths_on_each():
    """The root-mean-square error of a run rests on every level."""
    assert levels_open([finding("undecided", check="rmse")], range(4)) == [0, 1, 2, 3]


def test_a_finished_audit_fails_at_one_in_a_million_only(record, held):
    """What would be measured again is undecided where it cannot be."""
    entry = record.quantities["call"].levels[2].arms["float16"]
    for times, alone, state in ((2.45, False, "fails"), (2.45, True, "undecided"), (4.0, True, "fails")):
        fresh = changed(record, *ARM, "error_variance", to=times * entry.error_variance)
        fresh = changed(fresh, *ARM, "error_variance_se", to=0.1 * times * entry.error_variance)
        (one,) = [
            f
            for f in judge(held, fresh, alone=alone)
            if (f.check, f.level, f.quantity, f.arm) == ("error variance", 2, "call", "float16")
        ]
        assert one.state == state, (times, alone, one.message)


def test_a_number_is_not_shown_on_the_other_side_of_its_limit(record, held):
    """The digits of a figure go as far as its limit needs them."""
    from narrowgauge.policy.gateclaims import beside

    assert beside(1.49999, 1.5) == "1.49999"
    assert beside(1.42, 1.5) == "1.42"
    assert beside(1.5, 1.5) == "1.5"


def test_the_verdict_needs_no_numpy():
    """The pure part, and what reads a finished audit, import neither numpy nor scipy."""
    code = "import narrowgauge.policy.gatefile, sys; sys.exit(bool({'numpy', 'scipy', 'pandas'} & set(sys.modules)))"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
