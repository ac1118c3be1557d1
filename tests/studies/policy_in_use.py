"""A policy in use: the reserve option estimated 200 times by its policy, against a mean that is known much better.

Run as a program it writes reports/policy_in_use.md. examples/policy/estimate.py runs the reserve kernel as the policy
beside it says: on each level the planned paths in NumPy's float16 and float32, and the planned paths of the correction.
The same means by float64 alone stand beside. The true mean of each quantity on the finest level is that of as many
float64 runs as bring its standard error to a twentieth of the target.

What is asked: the root-mean-square error over the runs is between .8 and 1.2 of the target for the quantity that
decides how many paths there are, and at most 1.2 of it for the other one, which gets more paths than it needs; the mean
over the runs is within the bias budget (bias_share x rmse) and 3.3 standard errors of the true mean; and the cost that
the running script counts path by path is within 3% of the plan.
"""

from __future__ import annotations

import importlib.util
import math
import sys
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np

from narrowgauge import Policy
from narrowgauge.record.policy import PolicyDocument

ROOT = Path(__file__).parents[2]
REPEATS = 200
KNOWN_TO = 20  # the true mean, to one such part of the target: by as many runs, squared
SEEDS = {"policy": 10_000, "float64": 20_000}  # the first of each


def example() -> ModuleType:
    """Return the example's script as a module."""
    spec = importlib.util.spec_from_file_location("estimate", ROOT / "examples" / "policy" / "estimate.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module  # where its dataclasses look for their annotations
    spec.loader.exec_module(module)
    return module


def estimator(change: Callable[[PolicyDocument], PolicyDocument] = lambda document: document) -> Any:
    """Return the example's estimator with the policy beside it, or a changed one."""
    module = example()
    kernel, parameters = module.reserve()
    policy = Policy.load(module.POLICY, kernel=kernel)
    return module.Estimator(Policy(change(policy.document)), kernel, parameters)


@dataclass(frozen=True, slots=True, kw_only=True)
class Found:
    """Of one quantity: the true mean and its standard error, and the error of runs by the policy and by float64.

    `off` is the mean of the runs less the true mean, `off_se` its standard error with that of the true mean; `near` how
    far off it may be.
    """

    target: float
    true: float
    true_se: float
    rmse: float
    float64_rmse: float
    off: float
    off_se: float
    near: float


def ran(run: Callable[[int], Any], first: int, repeats: int) -> tuple[dict[str, np.ndarray], float]:
    """Return the means of each run by quantity, and what a run costs, which all of them do."""
    runs = [run(first + number) for number in range(repeats)]
    (cost,) = {one.cost for one in runs}
    return {name: np.array([one.mean[name] for one in runs]) for name in runs[0].mean}, cost


def compared(
    document: PolicyDocument, low: Mapping[str, np.ndarray], truth: Mapping[str, np.ndarray]
) -> dict[str, Found]:
    """Return what runs by the policy and runs by float64 say of each quantity."""
    found = {}
    for name, rmse in document.target.rmse.items():
        true = float(truth[name].mean())
        true_se = float(truth[name].std(ddof=1)) / math.sqrt(len(truth[name]))
        off_se = math.hypot(float(low[name].std(ddof=1)) / math.sqrt(len(low[name])), true_se)
        found[name] = Found(
            target=rmse,
            true=true,
            true_se=true_se,
            rmse=math.sqrt(float(np.mean((low[name] - true) ** 2))),
            float64_rmse=float(truth[name].std(ddof=1)),
            off=float(low[name].mean()) - true,
            off_se=off_se,
            near=document.target.bias_share * rmse + 3.3 * off_se,
        )
    return found


def deciding(document: PolicyDocument) -> str:
    """Return the quantity that asks for the most paths: whose variance is the largest part of its target's square."""
    parts = {}
    for name, rmse in document.target.rmse.items():
        variances = [one.measured[name].level_variance or 0.0 for one in document.levels]
        parts[name] = sum(v / one.paths for v, one in zip(variances, document.levels, strict=True)) / rmse**2
    return max(parts, key=parts.__getitem__)


def kept(document: PolicyDocument, found: Mapping[str, Found], cost: float) -> dict[str, bool]:
    """Return, of everything that is asked, whether it is so."""
    answers = {"cost": abs(cost / document.plan.cost - 1) <= 0.03}
    for name, one in found.items():
        low = 0.8 if name == deciding(document) else 0.0
        answers[f"{name}: error"] = low <= one.rmse / one.target <= 1.2
        answers[f"{name}: mean"] = abs(one.off) <= one.near
        answers[f"{name}: true mean"] = one.true_se <= one.target / KNOWN_TO
    return answers


def main() -> int:
    """Write the report, and return 1 where something that is asked is not so."""
    made = estimator()
    document = made.policy.document
    low, cost = ran(made.by_policy, SEEDS["policy"], REPEATS)
    truth, float64_cost = ran(made.in_float64, SEEDS["float64"], KNOWN_TO**2)
    found = compared(document, low, truth)
    headings = ("quantity", "target", "true mean", "its error", "error by the policy", "over the target")
    headings += ("error by float64", "mean, off by", "at most")
    rows = [f"| {' | '.join(headings)} |", "|---" * len(headings) + "|"]
    for name, one in found.items():
        cells = [one.true_se, one.rmse, one.rmse / one.target, one.float64_rmse, one.off, one.near]
        rows.append(f"| {name} | {one.target:g} | {one.true:.6g} | {' | '.join(f'{cell:.3g}' for cell in cells)} |")
    answers = kept(document, found, cost)
    head = (__doc__ or "").strip().split("\n\n", 1)
    lines = ["# A policy in use", "", head[0].replace("A policy in use: the", "The"), "", head[1], ""]
    lines += [
        f"{REPEATS} runs by the policy, {KNOWN_TO**2} by float64. Made by `python tests/studies/policy_in_use.py`.",
        "",
        *rows,
        "",
        f"A run by the policy costs {cost:,.0f}, counted path by path, where {document.plan.cost:,.0f} were planned\n"
        f"({cost / document.plan.cost - 1:+.2%}); float64 costs {float64_cost / cost:.2f} times as much. The paths"
        f" are those that {deciding(document)} needs.",
        "",
        "All that is asked is so."
        if all(answers.values())
        else f"Not so: {[one for one in answers if not answers[one]]}.",
    ]
    report = ROOT / "reports" / "policy_in_use.md"
    report.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return 0 if all(answers.values()) else 1


if __name__ == "__main__":
    sys.exit(main())
