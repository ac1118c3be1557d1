"""A small run of the study of a policy in use: the same policy for a target five times as wide."""

import math

import msgspec
import numpy as np
import policy_in_use as study
import pytest
from scipy import stats

WIDER, REPEATS = 5.0, 60
# The error of 60 runs over the one that was planned lies between these in all but 1e-6 of seeds, were the mean of a run
# normal: (60 x square) is a chi-square of 60 degrees of freedom.
LOW, HIGH = (math.sqrt(stats.chi2.ppf(share, REPEATS) / REPEATS) for share in (5e-7, 1 - 5e-7))


def wider(document, times=WIDER):
    """Return the policy for another target: paths go with its inverse square."""
    levels = []
    for one in document.levels:
        branches = (one.paths, one.correction_paths)
        paths, correction = (None if n is None else math.ceil(n / times**2) for n in branches)
        levels.append(msgspec.structs.replace(one, paths=paths, correction_paths=correction))
    rmse = {name: times * one for name, one in document.target.rmse.items()}
    return msgspec.structs.replace(
        document,
        levels=levels,
        target=msgspec.structs.replace(document.target, rmse=rmse),
        plan=msgspec.structs.replace(document.plan, cost=document.plan.cost / times**2),
    )


@pytest.fixture(scope="module")
def made():
    return study.estimator(wider)


@pytest.fixture(scope="module")
def runs(made):
    """The means of the runs by the policy and by float64, and what one of each costs."""
    return study.ran(made.by_policy, 1, REPEATS), study.ran(made.in_float64, 1001, REPEATS)


def test_both_ways_reach_the_target(made, runs):
    """The error about the audit's own mean, which the runs do not know, is what was planned for the option."""
    document = made.policy.document
    assert study.deciding(document) == "option"
    planned = math.sqrt(1 - document.target.bias_share**2) * document.target.rmse["option"]
    for means, _ in runs:
        assert LOW < means["option"].std(ddof=1) / planned < HIGH
        assert means["output"].std(ddof=1) < document.target.rmse["output"]


def test_both_ways_agree(made, runs):
    """With each other and with the reference's mean of the audit, within 4.9 standard errors and the bias budget."""
    document = made.policy.document
    (low, _), (wide, _) = runs
    for name in document.target.rmse:
        levels = [one.measured[name] for one in document.levels]
        audited = sum(one.level_mean for one in levels)
        audited_se = math.hypot(*(one.level_mean_se for one in levels))
        bias = len(levels) * study.estimator().policy.document.target.bias_budget[name]
        errors = {"low": low[name].std(ddof=1) / REPEATS**0.5, "wide": wide[name].std(ddof=1) / REPEATS**0.5}
        assert abs(low[name].mean() - wide[name].mean()) < bias + 4.9 * math.hypot(*errors.values())
        assert abs(low[name].mean() - audited) < bias + 4.9 * math.hypot(errors["low"], audited_se)
        assert abs(wide[name].mean() - audited) < 4.9 * math.hypot(errors["wide"], audited_se)


def test_the_cost_is_the_planned_one(made, runs):
    """What the script counts while it runs is the plan's cost, up to the paths that are rounded up; less without a
    coarse path, which the plan has."""
    document = made.policy.document
    (_, cost), (_, wide) = runs
    assert abs(cost / document.plan.cost - 1) < 0.03
    assert abs(wide / cost / document.plan.saving_over_reference - 1) < 0.03


def test_too_few_paths_are_seen():
    """Negative control: with a fourth of the paths the error is twice the planned one."""
    few = study.estimator(lambda document: wider(document, 2 * WIDER))
    target = study.estimator(wider).policy.document.target
    means, _ = study.ran(few.by_policy, 1, REPEATS)
    assert means["option"].std(ddof=1) / target.rmse["option"] > HIGH


def test_a_level_without_its_coarse_path_is_seen(made, runs, monkeypatch):
    """Negative control: the mean is far off, and the cost too small."""
    (_, cost), (wide, _) = runs
    monkeypatch.setattr(type(made), "_difference", lambda self, found, dW, level, name: self._run(found, dW, name))
    means, less = study.ran(made.by_policy, 1, 4)
    assert less < 0.9 * cost
    assert means["option"].mean() > 2 * wide["option"].mean()


def test_what_is_asked_is_looked_at():
    """Negative control: each thing that is asked is answered with no where it is not so."""
    document = study.estimator().policy.document
    generator = np.random.default_rng(1)
    truth = {name: generator.normal(1.0, 0.9 * rmse, 400) for name, rmse in document.target.rmse.items()}
    low = {name: generator.normal(1.0, rmse, 200) for name, rmse in document.target.rmse.items()}

    def answers(low=low, truth=truth, cost=document.plan.cost):
        found = study.kept(document, study.compared(document, low, truth), cost)
        return {name for name, so in found.items() if not so}

    wide = {name: values + 1.0 for name, values in low.items()}
    assert answers(cost=1.05 * document.plan.cost) == {"cost"}
    assert answers(low=wide) == {"option: error", "option: mean", "output: error", "output: mean"}
    narrow = {name: 1 + 0.5 * (values - 1) for name, values in low.items()}
    assert answers(low=narrow) == {"option: error"}
    assert answers(truth={name: values[:100] for name, values in truth.items()}) >= {"option: true mean"}


def test_a_policy_that_the_script_cannot_obey(made):
    """It says so and ends where the policy asks for draws that it does not make."""

    def approximate(document):
        levels = [msgspec.structs.replace(one, draws="approximate") for one in document.levels]
        return msgspec.structs.replace(document, levels=levels)

    with pytest.raises(SystemExit, match="exact normals"):
        study.estimator(approximate).by_policy(1)


def test_a_kernel_that_leaves_the_format_is_refused(made):
    """A kernel that computes in float64 whatever it is given is no narrow branch."""
    other = type(made)(
        made.policy, lambda dW, h, **parameters: {"option": dW.sum((0, 1), dtype=float)}, made.parameters
    )
    with pytest.raises(SystemExit, match="the kernel left float16"):
        other.by_policy(1)
