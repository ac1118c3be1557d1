"""What an audit file asks of one level: its costs, its target, and its share of what rounding may shift."""

from __future__ import annotations

from narrowgauge.judge.gain import LevelCosts
from narrowgauge.kernel.auditfile import AuditFile

__all__ = ["budget_levels", "coupled", "level_costs", "rmse_of"]


def coupled(file: AuditFile, level: int) -> bool:
    """Whether a level is a difference of a fine and a coarse path."""
    return level > 0 and file.kernel.coupling == "sum"


def level_costs(file: AuditFile, level: int) -> LevelCosts:
    """Return the costs of one level of an audit."""
    steps = file.ladder.steps(level)
    below = file.ladder.steps(level - 1) if coupled(file, level) else 0
    return LevelCosts(steps=steps + below, draws=steps * file.kernel.factors, table=file.costs)


def rmse_of(file: AuditFile, quantity: str) -> float | None:
    """Return the target root-mean-square error of a quantity, or None without a target."""
    if file.target is None:
        return None
    rmse = file.target.rmse
    return rmse.get(quantity) if isinstance(rmse, dict) else rmse


def budget_levels(file: AuditFile) -> int:
    """Return over how many levels the bias budget is shared: all, or one where levels are not added up."""
    return len(file.ladder.levels) if file.kernel.coupling == "sum" else 1
