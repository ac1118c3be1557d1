"""Records of plans: one for all quantities, corrections hardly ever seen, laws that do not fit, and the rules."""

from __future__ import annotations

from pathlib import Path

import pytest
from audit_cases import GEOMETRIC, audited

from narrowgauge.kernel.audittables import TargetTable
from narrowgauge.record.audit import AuditRecord, CommonPlanEntry, RulesEntry

TWO = """
import numpy as np

def value(dW, h):
    x = np.ones_like(dW[0])
    for n in range(dW.shape[0]):
        x = x + 0.05 * h * x + 0.2 * x * dW[n]
    return {"end": x, "square": x * x * x}
"""
DIGITAL = """
import numpy as np

def value(dW, h):
    x = np.ones_like(dW[0])
    for n in range(dW.shape[0]):
        x = x + 0.05 * h * x + 0.2 * x * dW[n]
    return (x > 1.0) * 1.0
"""
# The sum of all states grows with the steps, and so does its last place: Var E grows like the cube of them.
RUNNING_SUM = """
import numpy as np

def value(dW, h):
    x = np.ones_like(dW[0])
    total = 0.0 * x
    for n in range(dW.shape[0]):
        x = x + 0.05 * h * x + 0.2 * x * dW[n]
        total = total + x
    return total
"""
SPLIT32 = {"narrow": '["float32"]', "wide": '["float64"]', "schemes": '["split"]'}
TARGET = {"rmse": "{ end = 0.001, square = 0.004 }"}


def audit_of(folder: Path, source: str, **tables: dict[str, str]) -> AuditRecord:
    return audited(folder, source, **tables).record


def test_one_plan_for_two_quantities(tmp_path: Path) -> None:
    """Each level has one scheme; per branch the plan has the most paths that a quantity needs, and names it."""
    record = audit_of(tmp_path, TWO, target=TARGET)
    plan, entries = record.verdict.plan, record.quantities
    assert [one.scheme for one in plan.levels] == record.verdict.schemes
    assert plan.reason is None
    assert plan.levels
    for number, common in enumerate(plan.levels):
        own = {name: entry.allocation.levels[number] for name, entry in entries.items()}
        assert all(one.scheme == common.scheme for one in own.values())
        assert common.paths == max(one.paths for one in own.values()) == own[common.paths_decided_by].paths
        decider = common.correction_paths_decided_by
        assert (decider is None) == (common.correction_paths is None) == (common.scheme.wide is None)
        if decider is not None:
            most = max(one.correction_paths or 0 for one in own.values())
            assert common.correction_paths == most == own[decider].correction_paths
        assert common.cost >= max(one.cost for one in own.values())
    assert plan.cost == sum(one.cost for one in plan.levels)


def test_the_saving_of_the_common_plan_is_that_of_today_planned_likewise(tmp_path: Path) -> None:
    """Asked to plan float64 alone, an audit of the same paths has a plan that costs as much as the saving says."""
    first = audit_of(tmp_path, TWO, target=TARGET, sampling={"most_paths": "1024"}).verdict.plan
    alone = {"narrow": '["float32"]', "wide": "[]", "schemes": '["split"]'}  # no scheme but float64 alone
    second = audit_of(tmp_path, TWO, target=TARGET, formats=alone, sampling={"most_paths": "1024"}).verdict.plan
    assert second.saving == second.saving_over_reference == 1.0
    assert first.saving == first.saving_over_reference
    assert first.cost is not None
    assert second.cost is not None
    assert first.saving == second.cost / first.cost
    assert first.saving > 1.5


def test_the_plan_of_one_quantity_is_its_own(tmp_path: Path) -> None:
    """The verdict's plan then holds the paths of the quantity's, and its schemes are the best ones."""
    record = audit_of(tmp_path, GEOMETRIC, target={"rmse": "0.001"})
    own, common = record.quantities["value"].allocation, record.verdict.plan
    assert own.cost == common.cost
    assert [(one.paths, one.correction_paths) for one in own.levels] == [
        (one.paths, one.correction_paths) for one in common.levels
    ]
    best = [level.best for level in record.quantities["value"].levels]
    assert [(one.narrow, one.wide) for one in best if one] == [
        (one.narrow, one.wide) for one in record.verdict.schemes if one
    ]


@pytest.mark.parametrize(
    ("source", "tables", "reason"),
    [
        (TWO, {}, "no target"),
        (
            "def value(dW, h):\n    return {'a': 1.0 + dW[0], 'b': 1.0 + 0.0 * dW[0]}\n",
            {"target": {"rmse": "{ a = 0.1, b = 0.1 }"}},
            "b: nothing varies on any level, so that costs cannot be compared there: leave it out of what the kernel "
            "returns",
        ),
        (TWO, {"target": TARGET, "kernel": {"coupling": '"none"', "takes": '"uniforms"'}}, None),
    ],
    ids=["no target", "a constant", "not coupled"],
)
def test_where_there_is_no_common_plan_the_reason_says_so(
    tmp_path: Path, source: str, tables: dict[str, dict[str, str]], reason: str | None
) -> None:
    """No target, a quantity that does not vary, or levels that do not add up."""
    wanted = reason or "end: levels that are not coupled do not add up"
    plan = audit_of(tmp_path, source, **tables).verdict.plan
    assert plan == CommonPlanEntry(levels=[], cost=None, saving=None, saving_over_reference=None, reason=wanted)


def test_corrections_never_seen_leave_saving_and_plan_open(tmp_path: Path) -> None:
    """A digital payoff in float32, no event on any level: the saving's bounds lie apart, and 32 paths are not enough.

    The saving is no surer than the gains of the levels are at a third of its alpha.
    """
    record = audit_of(
        tmp_path,
        DIGITAL,
        formats=SPLIT32,
        target={"rmse": "0.01"},
        cost={"float64": "1.0", "float32": "0.5", "float16": "0.25", "bfloat16": "0.25"},
        sampling={"most_paths": "1024"},
    )
    entry = record.quantities["value"]
    split = [one for one in entry.levels if one.best is not None and one.best.wide is not None]
    assert split
    assert all(one.corrections["float32:float64"].events == 0 for one in split)
    allocation = entry.allocation
    assert allocation.saving_low is not None
    assert allocation.saving is not None
    assert allocation.saving_high is not None
    assert allocation.saving == pytest.approx(2.0, rel=1e-9)
    assert allocation.saving_low < 1.6
    assert allocation.saving_high > 2.0
    for plan in (*allocation.levels, *record.verdict.plan.levels):
        assert plan.bounded
        assert plan.correction_paths is not None
        assert plan.correction_paths > 32


def test_no_extrapolation_from_a_law_that_does_not_fit(tmp_path: Path) -> None:
    """A running sum in float32 obeys another law: its finest level is the last one measured, or finer."""
    record = audit_of(
        tmp_path,
        RUNNING_SUM,
        ladder={"finest": "7"},
        formats=SPLIT32,
        sampling={"block": "8192", "paths": "8192", "most_paths": "8192"},
    )
    laws = record.quantities["value"].accumulation["float32"]
    assert min(p for law in (laws.error, laws.correction) if (p := law.fit_p) is not None) < 0.001
    found = record.verdict.finest_paying_level["float32"]
    assert (found.level, found.extrapolated, found.cautious, found.possible) == (7, False, None, None)
    assert found.reason == "or finer, the law does not fit"


@pytest.mark.parametrize("target", [{}, {"rmse": "0.1", "bias_share": "0.5", "worthwhile": "1.5"}])
def test_the_rules_are_those_of_the_audit_file(tmp_path: Path, target: dict[str, str]) -> None:
    """Limits that turn figures into verdicts stand in the record once; without a target they are the defaults."""
    tables = {"target": target} if target else {}
    record = audit_of(tmp_path, GEOMETRIC, sampling={"most_paths": "1024"}, **tables)
    defaults = TargetTable(rmse=1.0)
    assert record.rules == RulesEntry(
        telescoping_se=3.3,
        least_effective_size=50,
        worthwhile=1.5 if target else defaults.worthwhile,
        bias_share=0.5 if target else defaults.bias_share,
        levels_sharing=3,
    )


def test_a_level_on_which_nothing_varies_is_named(tmp_path: Path) -> None:
    """An integral from the left is a constant after one step; with two it is not, and paths are planned."""
    integral = RUNNING_SUM.replace("        x = x +", "        total = total + x\n        x = x +").replace(
        "        total = total + x\n    return total", "    return total"
    )
    target = {"rmse": "0.1"}
    record = audit_of(tmp_path, integral, target=target)
    reason = "nothing varies on level 0, so that costs cannot be compared there: begin the ladder with more steps"
    assert record.verdict.plan.reason == f"{reason} (ladder.coarsest_steps)"
    assert record.quantities["value"].allocation.reason == record.verdict.plan.reason
    more = audit_of(tmp_path, integral, target=target, ladder={"coarsest_steps": "2"})
    assert more.verdict.plan.reason is None
