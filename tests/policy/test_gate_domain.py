"""The box of parameters that a policy claims: what of its scenarios holds, and what of it is told."""

from types import SimpleNamespace

import msgspec
import pytest
from policy_records import changed, policy

from narrowgauge.policy.gate import fails_for_now, judge, levels_open, second, verdict_of
from narrowgauge.record.plan import SchemeEntry
from narrowgauge.record.policy import ParameterPart

BOX = {
    "rate": ParameterPart(fixed=0.05),
    "volatility": ParameterPart(low=0.2, high=0.4, scale="linear"),
    "strike": ParameterPart(fixed=1.1),
}
SPLIT = SchemeEntry(kind="split", narrow="float16", wide="float32")


@pytest.fixture(scope="module")
def held(record):
    """A policy on four levels that claims a box of volatilities."""
    return changed(policy(record), "domain", "parameters", to=BOX)


def scenario(volatility, outcome="passes", reason=None, *, level=2, message=None, needed=None, edge=1.5):
    """A scenario that passes on all levels but one."""
    levels = [
        SimpleNamespace(
            level=number,
            outcome=outcome if number == level else "passes",
            reason=reason if number == level else None,
            edge=edge if number == level else 2.0,
            edge_low=edge - 0.2 if number == level else 1.8,
            edge_high=edge + 0.2 if number == level else 2.2,
            paths_needed=needed if number == level else None,
        )
        for number in range(4 if message is None else level)
    ]
    return SimpleNamespace(
        parameters={"volatility": volatility},
        outcome=outcome,
        reason=reason,
        level=None if outcome == "passes" else level,
        message=message,
        levels=levels,
    )


def tried(record, *scenarios, schemes=(SPLIT,) * 4, sides=(("volatility", 0.2, 0.5),)):
    """A record in which these scenarios were tried, of a box with these sides."""
    levels = [SimpleNamespace(level=number, scheme=scheme) for number, scheme in enumerate(schemes)]
    box = {name: SimpleNamespace(low=low, high=high) for name, low, high in sides}
    return msgspec.structs.replace(record, domain=SimpleNamespace(sides=box, levels=levels, scenarios=list(scenarios)))


def found(held, fresh, **more):
    return [one for one in judge(held, fresh, **more) if one.check == "domain"]


def test_a_policy_of_one_point_claims_no_box(record):
    """There is nothing to try."""
    assert found(policy(record), record) == []


def test_each_level_holds_where_all_that_lies_in_the_box_passes(record, held):
    """With the least edge of them; what lies outside the box was never claimed."""
    fresh = tried(record, scenario(0.2, edge=1.4), scenario(0.4), scenario(0.5, "refused", "edge"))
    levels = found(held, fresh)
    assert [(one.level, one.state) for one in levels] == [(number, "holds") for number in range(4)]
    assert (levels[2].estimate, levels[2].limit) == (1.4, 1.0)
    assert levels[2].low == pytest.approx(1.2)


@pytest.mark.parametrize(("reason", "alone", "state"), [
    ("edge", False, "fails"),
    ("bias", False, "fails"),
    ("edge", True, "undecided"),
    ("nonfinite", True, "fails"),
    ("raised", True, "fails"),
])  # fmt: skip
def test_a_refused_scenario_fails_its_level(record, held, reason, alone, state):
    """What hangs on the sample fails once it is tried twice; a value that is not finite is so at once."""
    fresh = tried(record, scenario(0.2), scenario(0.4, "refused", reason, edge=0.5), scenario(0.3, "undecided"))
    levels = found(held, fresh, alone=alone)
    assert [one.state for one in levels] == ["holds", "holds", state, "holds"]
    assert "1 of the 3 points" in levels[2].message
    assert "volatility = 0.4" in levels[2].message
    assert fails_for_now(levels) == (state == "fails" and reason in ("edge", "bias"))


def test_a_kernel_that_does_not_run_in_the_box_fails_from_that_level_on(record, held):
    """The message of the kernel is told; it is no chance of the sample."""
    fresh = tried(record, scenario(0.2), scenario(0.4, "refused", "reference", message="the kernel raised"))
    levels = found(held, fresh)
    assert [one.state for one in levels] == ["holds", "holds", "fails", "fails"]
    assert levels[2].message.endswith("at volatility = 0.4: the kernel raised")
    assert not fails_for_now(levels)


def test_an_undecided_scenario_is_no_pass_and_says_what_it_needs(record, held):
    """Its level of the audited point draws no more paths for it."""
    fresh = tried(record, scenario(0.2, "undecided", "budget", needed=40960, edge=1.05), scenario(0.4))
    levels = found(held, fresh)
    assert [one.state for one in levels] == ["holds", "holds", "undecided", "holds"]
    assert levels[2].paths_needed == 40960
    assert "about 40,960 paths there would decide" in levels[2].message
    assert verdict_of(levels) == "inconclusive"
    assert levels_open(levels, range(4)) == []


@pytest.mark.parametrize(
    ("edge", "reason", "state"),
    [(1.11, "budget", "holds"), (1.11, "edge", "holds"), (1.09, "budget", "undecided"), (1.5, "bias", "undecided")],
)
def test_an_edge_that_is_open_has_to_come_within_a_tenth_of_1(record, held, edge, reason, state):
    """With a lower bound 0.2 below it; and nothing else may be open."""
    fresh = tried(record, scenario(0.2, "undecided", reason, edge=edge))
    assert [one.state for one in found(held, fresh)] == ["holds", "holds", state, "holds"]


def test_a_refusal_has_its_figure_and_says_what_to_do(record, held):
    """An edge that is not rounded across 1."""
    fresh = tried(record, scenario(0.4, "refused", "edge", edge=0.7999))
    (one,) = [one for one in found(held, fresh) if one.state == "fails"]
    assert (
        "at volatility = 0.4: its edge is 0.8 (0.6 to 0.9999), at least 1 is accepted; where nothing has" in one.message
    )
    (one,) = [one for one in found(held, fresh, alone=True) if one.state == "undecided"]
    assert one.message.endswith("; the gate without --measured tries the corners of the box")


@pytest.mark.parametrize("scenarios", [(), (0.5,)])
def test_a_box_in_which_nothing_was_tried_is_undecided(record, held, scenarios):
    """Also where an audit had scenarios elsewhere, or none at all."""
    for fresh in (tried(record, *(scenario(one) for one in scenarios)), record):
        (one,) = found(held, fresh)
        assert (one.state, one.level) == ("undecided", None)
        assert verdict_of([one]) == "inconclusive"


def test_scenarios_of_another_scheme_say_nothing_of_the_policys(record, held):
    """A finished audit may have taken another one on a level."""
    other = SchemeEntry(kind="alone", narrow="float64", wide=None)
    fresh = tried(record, scenario(0.2), schemes=(SPLIT, SPLIT, other, SPLIT))
    assert [one.state for one in found(held, fresh)] == ["holds", "holds", "undecided", "holds"]


def test_a_corner_refused_once_fails_only_if_it_is_refused_again(record, held):
    """On fresh draws, as every claim."""
    bad, good = (tried(record, scenario(0.4, outcome, reason, edge=0.5)) for outcome, reason in (
        ("refused", "edge"), ("passes", None)
    ))  # fmt: skip
    first = found(held, bad)
    assert verdict_of(second(first, found(held, good))) == "pass"
    again = second(first, found(held, bad))
    assert [(one.state, one.stages) for one in again if one.level == 2] == [("fails", 2)]


@pytest.mark.parametrize("sides", [
    [("volatility", 0.2, 0.39)],
    [("volatility", 0.21, 0.4)],
    [],
    [("rate", 0.0, 1.0)],
])  # fmt: skip
def test_scenarios_of_a_part_of_the_box_say_nothing_of_all_of_it(record, held, sides):
    """A narrower box, or one without a side; what fails in a part fails in the whole."""
    fine, infinite = scenario(0.3), scenario(0.3, "refused", "nonfinite")
    for one in (fine, infinite):
        one.parameters = {name: 0.3 if name == "volatility" else 0.05 for name, *_ in sides}
    levels = found(held, tried(record, fine, sides=sides), alone=True)
    assert [(one.level, one.state) for one in levels] == [(number, "undecided") for number in range(4)]
    assert all(one.message.endswith("the gate without --measured tries the corners of the box") for one in levels)
    assert [one.state for one in found(held, tried(record, infinite, sides=sides), alone=True)][2] == "fails"
    whole = tried(record, scenario(0.3), sides=[("volatility", 0.2, 0.4)])
    assert {one.state for one in found(held, whole, alone=True)} == {"holds"}


@pytest.mark.parametrize(("needs", "point", "said"), [
    ((2048, 40960, 512), "0.3", "; about 40,960 paths there would decide"),
    ((2048, 512, None), "0.4", ""),
])  # fmt: skip
def test_of_several_open_points_the_one_that_needs_most_is_named(record, held, needs, point, said):
    """No number where one of them cannot be told."""
    points = [
        scenario(at, "undecided", "budget", needed=needed, edge=1.0)
        for at, needed in zip((0.2, 0.3, 0.4), needs, strict=True)
    ]
    one = found(held, tried(record, *points))[2]
    assert one.message == "level 2: 3 of the 3 points that were tried in the box of the policy are undecided, at " + (
        f"volatility = {point}{said}"
    )
    assert one.paths_needed == (40960 if said else None)


def test_a_level_is_refused_for_its_own_reason_where_another_one_stopped(record, held):
    """The sample refuses level 1, the kernel ends on level 3: that is no fact of level 1."""
    stopped = scenario(0.4, "refused", "reference", level=3, message="the kernel raised")
    stopped.levels[1] = scenario(0.4, "refused", "edge", level=1, edge=0.5).levels[1]
    stopped.level = 1
    levels = found(held, tried(record, stopped))
    assert [one.state for one in levels] == ["holds", "fails", "holds", "fails"]
    assert "its edge is 0.5 (" in levels[1].message
    assert fails_for_now(levels[1:2])
    assert levels[3].message.endswith("at volatility = 0.4: the kernel raised")


def test_a_kernel_that_stops_with_more_paths_fails_where_it_may_have(record, held):
    """All levels were looked at before: on each one that is not refused for its own reason."""
    stopped = scenario(0.4, "refused", "edge", level=1, edge=0.5)
    stopped.message = "the kernel raised"
    levels = found(held, tried(record, stopped))
    assert [one.state for one in levels] == ["fails"] * 4
    assert ["the kernel raised" in one.message for one in levels] == [True, False, True, True]


def test_a_level_that_is_not_finite_stops_no_other_one(record, held):
    """Its own entry says so."""
    stopped = scenario(0.4, "refused", "reference", level=2)
    stopped.message = "level 2: the reference is not finite on 3 of 1024 paths"
    levels = found(held, tried(record, stopped))
    assert [one.state for one in levels] == ["holds", "holds", "fails", "holds"]
    assert levels[2].message.endswith(stopped.message)


def test_a_split_whose_branches_differ_runs_all_the_same(record, held):
    """It is refused for what it is."""
    levels = found(held, tried(record, scenario(0.4, "refused", "branches")))
    assert levels[2].message.endswith("at volatility = 0.4: the two branches of its split differ")


def test_a_corner_that_breaks_on_fresh_draws_alone_stands_there_once(record, held):
    """It fails, and nothing says that it holds."""
    first = found(held, tried(record, scenario(0.4)))
    broken = found(held, tried(record, scenario(0.4, "refused", "nonfinite")))
    both = second(first, broken)
    assert sorted((one.level, one.state) for one in both) == [(0, "holds"), (1, "holds"), (2, "fails"), (3, "holds")]
