"""Which scheme a policy uses on each level, and the paths that follow."""

from __future__ import annotations

import math

import pytest
from policy_records import BUDGET, LEVELS, changed, judged, policy, run_cost, sampling_variance

from narrowgauge.judge.allocation import Part, planned
from narrowgauge.policy import drawup
from narrowgauge.policy.choice import scheme_of
from narrowgauge.policy.plan import replanned
from narrowgauge.record.plan import SchemeEntry

REFERENCE = ("alone", "float64", None)
SPLIT = ("split", "float16", "float32")
ALONE = ("alone", "float32", None)


def schemes(document):
    return [(one.scheme, one.narrow, one.wide) for one in document.levels]


def said(document, words):
    return [one for one in document.cautions if words in one]


class TestChoice:
    def test_what_pays_is_used(self, record):
        """Where the audit's format pays for every quantity its scheme is the policy's, and nothing is said about it."""
        assert schemes(policy(record)) == [SPLIT] * 4
        assert not said(policy(record), "Level ")

    @pytest.mark.parametrize("quantities", [("end",), ("call",), ("end", "call")])
    def test_an_undecided_level_uses_the_reference(self, record, quantities):
        """Where the audit's format is undecided for any quantity the reference is used, and a caution says so."""
        document = policy(judged(record, 2, "float16", "undecided", quantities=quantities))
        assert schemes(document) == [SPLIT, SPLIT, REFERENCE, SPLIT]
        one = document.levels[2]
        assert (one.verdict, one.reason, one.correction_paths) == ("undecided", "budget", None)
        assert len(said(document, "Level ")) == 1
        assert said(
            document, "Level 2 uses the reference: it is undecided whether low precision pays there, because the"
        )
        assert document.plan.replanned

    def test_a_format_that_does_not_pay_gives_way_to_one_that_does(self, record):
        """The cheapest scheme of those that pay for every quantity takes its place."""
        document = policy(judged(record, 3, "float16", "does not pay", quantities=("call",)))
        assert schemes(document) == [SPLIT, SPLIT, SPLIT, ALONE]
        assert document.levels[3].verdict == "pays"
        assert said(document, "Level 3 uses float32 alone: float16, which the audit planned, does not pay for every")

    def test_where_nothing_pays_the_reference_is_used(self, record):
        """With the reason of the format that the audit planned."""
        made = judged(record, 3, "float16", "does not pay")
        document = policy(judged(made, 3, "float32", "does not pay", quantities=("end",)))
        assert schemes(document)[3] == REFERENCE
        one = document.levels[3]
        assert (one.verdict, one.reason, one.gain, one.edge, one.decided_by) == (
            "does not pay",
            "budget",
            1.0,
            None,
            None,
        )

    def test_a_format_that_nobody_judged_is_not_used(self, record):
        """What runs today may be the cheapest without having been asked for; the reference is used, and it is said."""
        made = changed(record, "verdict", "schemes", 1, to=SchemeEntry(kind="alone", narrow="float32", wide=None))
        made = judged(judged(made, 1, "float32", None), 1, "float16", "does not pay")
        document = policy(made)
        assert schemes(document)[1] == REFERENCE
        assert said(
            document, "Level 1 uses float64 alone: float32, which the audit planned, is not among formats.narrow"
        )

    def test_the_audits_own_reference(self, record):
        """Where the audit found nothing cheaper the level says whether that is known."""
        made = changed(record, "verdict", "schemes", 0, to=SchemeEntry(kind="alone", narrow="float64", wide=None))
        made = changed(made, "verdict", "plan", "levels", 0, "correction_paths", to=None)
        for arm in ("float16", "float32"):
            made = judged(made, 0, arm, "does not pay")
        assert (policy(made).levels[0].verdict, schemes(policy(made))[0]) == ("does not pay", REFERENCE)
        made = judged(made, 0, "float32", "undecided")
        assert policy(made).levels[0].verdict == "undecided"

    def test_the_gain_of_another_scheme_is_not_claimed(self, record):
        """Figures are those of quantities for which this very scheme was judged; of none there are none."""
        alone = SchemeEntry(kind="alone", narrow="float16", wide=None)
        made = record
        for name in record.quantities:
            made = changed(made, "quantities", name, "levels", 0, "arms", "float16", "scheme", to=alone)
        one = policy(made).levels[0]
        assert (one.scheme, one.decided_by, one.gain, one.edge_low, one.breakeven_cost_ratio) == ("split", *[None] * 4)


class TestPaths:
    def test_planned_anew_the_audits_plan_is_the_same(self, record):
        """With the audit's own schemes the paths worked out from the record are those of its plan, to the path."""
        draft = drawup._Draft(record, "")
        schemes = {level: scheme_of(one) for level, one in enumerate(record.verdict.schemes)}
        found = replanned(record, schemes, draft._level_costs, 0.25)
        assert [(one.low.paths, one.correction.paths) for one in found.levels] == [
            (one.paths, one.correction_paths) for one in record.verdict.plan.levels
        ]
        assert found.cost == pytest.approx(record.verdict.plan.cost, rel=1e-12)

    @pytest.mark.parametrize("level", LEVELS)
    @pytest.mark.parametrize("verdict", ["undecided", "does not pay"])
    def test_another_scheme_still_reaches_the_target(self, record, level, verdict):
        """The sum of V / N over all branches stays inside the budget for each quantity, near it for the worst.

        With the reference on that level and the audit's own paths on the others it would not: the control.
        """
        document = policy(judged(record, level, "float16", verdict))
        found = [sampling_variance(record, document, name) for name in record.quantities]
        assert max(found) <= BUDGET * (1 + 1e-12)
        assert max(found) > 0.9 * BUDGET
        assert document.plan.cost == pytest.approx(run_cost(document), rel=1e-12)
        kept = policy(record)
        assert document.plan.saving == pytest.approx(kept.plan.saving * kept.plan.cost / document.plan.cost, rel=1e-12)
        if verdict == "does not pay":  # another narrow format takes its place, which may cost less
            return
        mixed = [old if old.level != level else new for old, new in zip(kept.levels, document.levels, strict=True)]
        control = changed(document, "levels", to=mixed)
        assert max(sampling_variance(record, control, name) for name in record.quantities) > BUDGET

    def test_a_variance_planned_from_a_bound(self, record):
        """Of a bounded branch the paths say what variance was planned; planned anew it has no fewer than it needs.

        The record is given a plan from a bound 10,000 times the sample variance; the paths worked out anew, with
        another level changed, are those of that bound to within the rounding of the paths.
        """
        costs = drawup._Draft(record, "")._level_costs
        own = {level: scheme_of(one) for level, one in enumerate(record.verdict.schemes)}

        def parts(name, level, scheme):
            entry = record.quantities[name].levels[level]
            found = [
                Part(variance=entry.arms[scheme.narrow].level_variance, cost=costs[level].path(scheme.narrow), least=32)
            ]
            if scheme.wide is not None:
                variance = entry.corrections[f"{scheme.narrow}:{scheme.wide}"].variance * (10_000 if level == 1 else 1)
                found.append(
                    Part(variance=variance, cost=costs[level].correction(scheme.narrow, scheme.wide), least=32)
                )
            return found

        made = record
        for name, quantity in record.quantities.items():
            plan = planned({level: parts(name, level, one) for level, one in own.items()}, own, 0.002, 0.25)
            for one in plan.levels:
                entry = quantity.allocation.levels[one.level]
                new = changed(entry, "paths", to=one.paths)
                new = changed(new, "correction_paths", to=one.correction_paths)
                steps = ("quantities", name, "allocation", "levels", one.level)
                made = changed(made, *steps, to=changed(new, "bounded", to=one.level == 1))
        other = {**own, 3: scheme_of(SchemeEntry(kind="alone", narrow="float64", wide=None))}
        found = replanned(made, other, costs, 0.25)
        needed = {
            name: planned({level: parts(name, level, one) for level, one in other.items()}, other, 0.002, 0.25)
            for name in record.quantities
        }
        for one in found.levels:
            least = max(plan.levels[one.level].paths for plan in needed.values())
            assert least <= one.low.paths <= math.ceil(least * 1.01)
        assert found.levels[1].bounded
        most = max(plan.levels[1].correction_paths for plan in needed.values())
        assert most <= found.levels[1].correction.paths <= math.ceil(most * 1.02)
