"""The reserve option of ../reserve, estimated twice: all in float64, and as its precision policy says. INVENTED DATA.

    python examples/policy/estimate.py [POLICY.json] [--seed N]

The policy beside this file was drawn up from the audit of ../reserve:

    narrowgauge audit examples/reserve/reserve.toml --out audits/reserve
    narrowgauge policy audits/reserve --out examples/policy/reserve.policy.json

A level's contribution is the mean of D, its fine path less its coarse path on the same draws. By the policy most levels
are split: many paths of D in a narrow format, and few of the correction, D in the wide format less D in the narrow one.
Increments are made in float64 and rounded to each format; the coarse path sees sums of the rounded ones, added in that
format. NumPy rounds every operation on an array to the array's type, so that the kernel's float16 is the audit's. Means
are taken in float64. What is run is counted, path by path, by the cost table that the policy carries.
"""

from __future__ import annotations

import argparse
import importlib.util
import math
import sys
import tomllib
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from narrowgauge import Policy

FOLDER = Path(__file__).parent
RESERVE = FOLDER.parent / "reserve"
POLICY = FOLDER / "reserve.policy.json"
FACTORS = 2
_DRAWS_AT_ONCE = 2**18  # of one run of the kernel: what fits a processor's cache


def reserve() -> tuple[Callable, dict]:
    """Return the kernel and the parameters that it runs with, from the audited example."""
    spec = importlib.util.spec_from_file_location("reserve", RESERVE / "reserve.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module.value, tomllib.loads((RESERVE / "reserve.toml").read_text(encoding="utf-8"))["parameters"]


@dataclass
class Estimate:
    """Of each quantity the mean and the variance of that mean, and what was spent, in the unit of the cost table."""

    mean: dict[str, float] = field(default_factory=dict)
    variance: dict[str, float] = field(default_factory=dict)
    cost: float = 0.0

    def error(self, name: str) -> float:
        """Return the standard error of a quantity's mean, from its own sample."""
        return math.sqrt(self.variance[name])


class Estimator:
    """Estimates the means on the finest level of a policy's ladder; one run after the other, each with a seed."""

    def __init__(self, policy: Policy, kernel: Callable, parameters: dict) -> None:
        self.policy, self.kernel, self.parameters = policy, kernel, parameters
        self.ladder, self.costs = policy.document.ladder, policy.document.cost

    def by_policy(self, seed: int) -> Estimate:
        """Run the scheme of each level, with the paths that the policy plans."""
        generator, found = np.random.default_rng(seed), Estimate()
        for one in self.policy.document.levels:
            rule = self.policy.at(one.level, **self.parameters)
            if rule.draws != "exact" or rule.rounding != "nearest":
                raise SystemExit("this script draws exact normals, and rounds to nearest")
            narrow = (rule.narrow, rule.narrow_dtype)
            self._branch(found, generator, one.level, rule.paths, [narrow])
            if rule.scheme == "split":
                wide = (rule.wide, rule.wide_dtype)
                self._branch(found, generator, one.level, rule.correction_paths, [narrow, wide])
        return found

    def in_float64(self, seed: int) -> Estimate:
        """Run every level in float64 alone, with the paths that reach the same target."""
        generator, found = np.random.default_rng(seed), Estimate()
        for level, paths in enumerate(self.reference_paths()):
            self._branch(found, generator, level, paths, [("float64", np.dtype(np.float64))])
        return found

    def reference_paths(self) -> list[int]:
        """Return the paths of each level in float64 alone: the most that a quantity's target asks for.

        N = ceil(sum of sqrt(V C) x sqrt(V / C) / ((1 - bias_share^2) rmse^2)) with the variances of the policy's audit,
        which is also how the audit plans the run that it compares with.
        """
        document = self.policy.document
        costs = [self._path_cost(one.level) for one in document.levels]
        paths = [1] * len(costs)
        for name, rmse in document.target.rmse.items():
            variances = [one.measured[name].level_variance for one in document.levels]
            total = sum(math.sqrt(v * c) for v, c in zip(variances, costs, strict=True))
            budget = (1 - document.target.bias_share**2) * rmse**2
            needed = [
                max(32, math.ceil(total * math.sqrt(v / c) / budget)) for v, c in zip(variances, costs, strict=True)
            ]
            paths = list(map(max, paths, needed))
        return paths

    def _path_cost(self, level: int) -> float:
        """Return the cost of one path of a level in float64, its coarse path with it."""
        steps = self._steps(level) + (self._steps(level - 1) if level else 0)
        draws = self._steps(level) * FACTORS
        return steps * self.costs.steps["float64"] + draws * self.costs.draws + self.costs.path

    def _steps(self, level: int) -> int:
        return self.ladder.coarsest_steps * self.ladder.refinement**level

    def _branch(self, found: Estimate, generator: np.random.Generator, level: int, paths: int, formats: list) -> None:
        """Add the mean of D in one format, or of D in the second format less D in the first, to an estimate."""
        steps = self._steps(level)
        at_once = max(1, _DRAWS_AT_ONCE // (steps * FACTORS))
        sums: dict[str, np.ndarray] = {}
        for start in range(0, paths, at_once):
            shape = (steps, FACTORS, min(at_once, paths - start))
            increments = generator.standard_normal(shape) * math.sqrt(self.ladder.horizon / steps)
            found.cost += shape[2] * (steps * FACTORS * self.costs.draws + self.costs.path)
            runs = [self._difference(found, increments.astype(dtype), level, name) for name, dtype in formats]
            for name, top in runs[-1].items():
                values = top if len(runs) == 1 else top - runs[0][name]
                sums[name] = sums.get(name, 0.0) + np.array([values.sum(), (values * values).sum()])
        for name, (total, squares) in sums.items():
            mean = float(total) / paths
            found.mean[name] = found.mean.get(name, 0.0) + mean
            spread = (float(squares) / paths - mean * mean) / max(1, paths - 1)
            found.variance[name] = found.variance.get(name, 0.0) + spread

    def _difference(self, found: Estimate, dW: np.ndarray, level: int, name: str) -> dict[str, np.ndarray]:
        """Return D, as float64: fine path less coarse path, each computed in the type of `dW`."""
        fine = self._run(found, dW, name)
        if level == 0:
            return fine
        groups = dW.reshape(-1, self.ladder.refinement, *dW.shape[1:])
        coarse_dW = groups[:, 0]
        for place in range(1, self.ladder.refinement):
            coarse_dW = coarse_dW + groups[:, place]
        coarse = self._run(found, coarse_dW, name)
        return {quantity: values - coarse[quantity] for quantity, values in fine.items()}

    def _run(self, found: Estimate, dW: np.ndarray, name: str) -> dict[str, np.ndarray]:
        steps, _, paths = dW.shape
        found.cost += paths * steps * self.costs.steps[name]
        values = self.kernel(dW, self.ladder.horizon / steps, **self.parameters)
        if any(one.dtype != dW.dtype for one in values.values()):
            raise SystemExit(f"the kernel left {name}")
        return {quantity: one.astype(np.float64) for quantity, one in values.items()}


def main(arguments: list[str]) -> int:
    """Estimate both ways, show what came out, and return 1 where they miss the target or do not agree."""
    parser = argparse.ArgumentParser(description="Estimates the reserve option in float64 and by a precision policy.")
    parser.add_argument("policy", nargs="?", default=POLICY, metavar="POLICY.json", help="(default: the one beside)")
    parser.add_argument("--seed", type=int, default=1, help="of the first run; the second has the next (default: 1)")
    given = parser.parse_args(arguments)
    kernel, parameters = reserve()
    policy = Policy.load(given.policy, kernel=kernel)
    estimator = Estimator(policy, kernel, parameters)
    target, plan = policy.document.target, policy.document.plan
    runs = [("all float64", estimator.in_float64(given.seed)), ("by the policy", estimator.by_policy(given.seed + 1))]
    print(f"{'':14}" + "".join(f"{name + ' (standard error)':>28}" for name in target.rmse) + f"{'cost':>14}")
    for words, run in runs:
        cells = [f"{run.mean[name]:.6g} ({run.error(name):.2g})" for name in target.rmse]
        print(f"{words:14}" + "".join(f"{cell:>28}" for cell in cells) + f"{run.cost:>14,.0f}")
    (_, reference), (_, low) = runs
    print(
        f"\nThe policy planned a cost of {plan.cost:,.0f}; float64 costs {reference.cost / low.cost:.2f} times as much."
    )
    well = True
    for name, rmse in target.rmse.items():
        bias = target.bias_share * rmse
        worst = math.hypot(max(run.error(name) for _, run in runs), bias)
        apart = abs(low.mean[name] - reference.mean[name])
        # A false alarm in 1 of 1,000 seeds a quantity.
        near = bias + 3.3 * math.hypot(low.error(name), reference.error(name))
        print(f"{name}: error at most {worst:.2g}, target {rmse:g}; the two are {apart:.2g} apart, at most {near:.2g}.")
        well = well and worst <= 1.2 * rmse and apart <= near
    print("Both reach the target and agree." if well else "They miss the target, or do not agree.")
    return 0 if well else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
