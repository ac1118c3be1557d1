"""The plans of an audit as entries of the record: paths and savings by quantity, and one plan for all of them."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from narrowgauge.conduct.entries import finite, interval_fields, scheme_entry
from narrowgauge.conduct.run import Outcome
from narrowgauge.judge.allocation import Allocation, CommonLevel, LevelPlan, allocate, common_plan
from narrowgauge.judge.asked import rmse_of
from narrowgauge.judge.gain import LevelView, Scheme
from narrowgauge.judge.saving import saving
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.record.audit import AllocationEntry, CommonLevelEntry, CommonPlanEntry, PlanEntry

__all__ = ["allocation_entry", "common_plan_entry"]


def allocation_entry(file: AuditFile, outcome: Outcome, name: str, weak_error: float | None) -> AllocationEntry:
    """Return what one quantity needs and saves with the schemes that serve all quantities."""
    schemes, reason = _schemes(file, outcome, name)
    views = _views(outcome, name)
    over: dict[str, Any] = {}
    for label, rival in (("saving", file.formats.today), ("saving_over_reference", REFERENCE)):
        known = schemes is not None and all(rival in view.tally.differences for view in views.values())
        found = saving(views, schemes, Scheme(kind="alone", narrow=rival), outcome.alpha) if schemes and known else None
        over |= interval_fields(label, found)
    plan = None if schemes is None else _allocated(file, outcome, name, schemes)
    return AllocationEntry(
        rmse=rmse_of(file, name),
        levels=[_plan_entry(one) for one in (plan.levels if plan else ())],
        cost=plan.cost if plan else None,
        **over,
        weak_error=weak_error,
        reason=reason or (None if plan else "no target"),
    )


def common_plan_entry(file: AuditFile, outcome: Outcome) -> CommonPlanEntry:
    """Return the plan of a run that serves all quantities, and the costs of today and reference over its own."""
    names = list(outcome.judgements[min(outcome.judgements)].views)
    plans: dict[str, Allocation] = {}
    for name in names:
        schemes, reason = _schemes(file, outcome, name)
        plan = None if schemes is None else _allocated(file, outcome, name, schemes)
        if plan is None:
            why = reason or "no target"
            blamed = f"{name}: {why}" if reason is not None and len(names) > 1 else why
            return CommonPlanEntry(levels=[], cost=None, saving=None, saving_over_reference=None, reason=blamed)
        plans[name] = plan
    common = common_plan(plans)
    today, reference = (_alone_cost(file, outcome, names, arm) for arm in (file.formats.today, REFERENCE))
    return CommonPlanEntry(
        levels=[_common_entry(one) for one in common.levels],
        cost=common.cost,
        saving=None if today is None else finite(today / common.cost),
        saving_over_reference=None if reference is None else finite(reference / common.cost),
        reason=None,
    )


def _schemes(file: AuditFile, outcome: Outcome, name: str) -> tuple[dict[int, Scheme] | None, str | None]:
    """Return the scheme of each level for a run that serves all quantities, or why a quantity has no plan with them."""
    levels = sorted(outcome.judgements)
    # Levels that are not coupled are alternatives: nothing of them adds up.
    if file.kernel.coupling != "sum" and len(levels) > 1:
        return None, "levels that are not coupled do not add up"
    found = {}
    for level in levels:
        judged = outcome.judgements[level]
        if judged.joint is None or judged.best[name] is None:
            return None, _without_scheme(level, _views(outcome, name), alone=len(judged.views) == 1)
        found[level] = judged.joint
    return found, None


def _without_scheme(level: int, views: Mapping[int, LevelView], *, alone: bool) -> str:
    """Return why no scheme can be chosen: the first step of many kernels moves nothing that they return."""
    still = {one for one, view in views.items() if view.tally.differences[REFERENCE].moments.variance == 0}
    if level not in still:
        return "a level without a finite scheme"
    advice, where = "", f"level {level}"
    if len(still) == len(views):
        advice, where = "" if alone else ": leave it out of what the kernel returns", "any level"
    elif level == 0:
        advice = ": begin the ladder with more steps (ladder.coarsest_steps)"
    return f"nothing varies on {where}, so that costs cannot be compared there{advice}"


def _views(outcome: Outcome, name: str) -> dict[int, LevelView]:
    return {level: judged.views[name] for level, judged in sorted(outcome.judgements.items())}


def _allocated(file: AuditFile, outcome: Outcome, name: str, schemes: dict[int, Scheme]) -> Allocation | None:
    """Return the paths of one quantity; None without a target."""
    rmse = rmse_of(file, name)
    if rmse is None or file.target is None:
        return None
    return allocate(_views(outcome, name), schemes, rmse, file.target.bias_share, outcome.alpha)


def _alone_cost(file: AuditFile, outcome: Outcome, names: list[str], arm: str) -> float | None:
    """Return the cost of a plan for all quantities with one arm alone; None where that arm is not finite."""
    plans = {}
    for name in names:
        views = _views(outcome, name)
        differences = [view.tally.differences.get(arm) for view in views.values()]
        if any(one is None or one.nonfinite or finite(one.moments.variance) is None for one in differences):
            return None
        plan = _allocated(file, outcome, name, dict.fromkeys(views, Scheme(kind="alone", narrow=arm)))
        if plan is None:
            return None
        plans[name] = plan
    return common_plan(plans).cost


def _plan_entry(one: LevelPlan) -> PlanEntry:
    return PlanEntry(
        level=one.level,
        scheme=scheme_entry(one.scheme),
        paths=one.paths,
        correction_paths=one.correction_paths,
        bounded=one.bounded,
        cost=one.cost,
    )


def _common_entry(one: CommonLevel) -> CommonLevelEntry:
    return CommonLevelEntry(
        level=one.level,
        scheme=scheme_entry(one.scheme),
        paths=one.low.paths,
        paths_decided_by=one.low.decided_by,
        correction_paths=None if one.correction is None else one.correction.paths,
        correction_paths_decided_by=None if one.correction is None else one.correction.decided_by,
        bounded=one.bounded,
        cost=one.cost,
    )
