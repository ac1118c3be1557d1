"""The example that obeys a policy: the policy is what the audit gives, and its narrow branch is what was audited.

That runs by it reach the target is the study tests/studies/policy_in_use.py.
"""

from __future__ import annotations

import importlib.util
import re
import sys

import msgspec
import numpy as np
import pytest
from example_files import EXAMPLES

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.kernel.auditfile import read_audit_file
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.policy.drawup import draw_up, read_audit
from narrowgauge.policy.guard import Policy
from narrowgauge.record.policy import policy_text, read_policy

FOLDER = EXAMPLES / "policy"
LEVEL, PATHS = 4, 20_000


@pytest.fixture(scope="module")
def script():
    """The example's script as a module."""
    spec = importlib.util.spec_from_file_location("estimate_of_the_example", FOLDER / "estimate.py")
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module  # where its dataclasses look for their annotations
    spec.loader.exec_module(module)
    yield module
    del sys.modules[spec.name]


def without_provenance(document):
    """Return a policy without what may differ between two audits of one file on one machine."""
    blank = {"audit": "sha256:" + "0" * 64, "versions": {}, "finished": None}
    evidence = msgspec.structs.replace(document.evidence, **blank)
    kernel = msgspec.structs.replace(document.kernel, packages={})
    return policy_text(msgspec.structs.replace(document, evidence=evidence, kernel=kernel))


def test_the_policy_is_what_the_audit_gives(reserve):
    """The same bytes apart from provenance, on a machine of the same class with the same NumPy; else the same rules.

    float32's exp differs in last bits between processors, which moves the paths by less than one in a hundred.
    """
    path = FOLDER / "reserve.policy.json"
    committed, now = read_policy(path), draw_up(*read_audit(reserve[0] / "audits" / "reserve"))
    assert path.read_text(encoding="utf-8") == policy_text(committed)
    same = [(one.evidence.machine, one.evidence.versions.get("numpy")) for one in (committed, now)]
    if same[0] == same[1]:
        assert without_provenance(committed) == without_provenance(now)
    assert (committed.kernel.fingerprint, committed.domain) == (now.kernel.fingerprint, now.domain)
    assert (committed.ladder, committed.target, committed.cost) == (now.ladder, now.target, now.cost)
    for one, other in zip(committed.levels, now.levels, strict=True):
        assert (one.scheme, one.narrow, one.wide, one.verdict) == (
            other.scheme,
            other.narrow,
            other.wide,
            other.verdict,
        )
        assert one.paths == pytest.approx(other.paths, rel=0.01)
        assert (one.correction_paths or 0) == pytest.approx(other.correction_paths or 0, rel=0.01)


@pytest.mark.parametrize("name", ["float16", "float32", "float64"])
def test_the_branch_is_the_audits_arithmetic(script, name):
    """On the draws of an audit's block D has the emulation's bits, in either quantity.

    But for the exp of float16, which NumPy may compute in float32 and round twice. A float32 result that is 2.5 units
    in the last place off, the most that NumPy's own tests allow (recalled from memory), is on the wrong side of a
    middle between two float16 in 2 x 2.5 of 2^13 cases, and D has two of them. Negative control: what rounds to
    float32 only.
    """
    file = read_audit_file(EXAMPLES / "reserve" / "reserve.toml")
    runner = BlockRunner(file, find_kernel(file))
    draws = runner.draws(LEVEL, 0)
    caller = runner.caller(arithmetic_named(name))
    fine = caller.fine(draws, LEVEL, coarse_follows=True)
    coarse = caller.coarse(draws, LEVEL)
    kernel, parameters = script.reserve()
    estimator = script.Estimator(Policy.load(script.POLICY), kernel, parameters)

    def differing(dW, quantity):
        found = estimator._difference(script.Estimate(), dW, LEVEL, name)[quantity]
        return np.count_nonzero((found != fine[quantity] - coarse[quantity])[:PATHS])

    increments = draws.values.astype(name)
    assert differing(increments, "output") == 0
    assert differing(increments, "option") <= (PATHS * 2 * 5 / 2**13 if name == "float16" else 0)
    if name == "float16":
        assert differing(increments.astype("float32"), "output") > PATHS / 3


def test_the_script_as_it_is_called(script, capsys, tmp_path):
    """It prints both estimates with their costs, says that they agree, and ends with 0; at a wider target, for time."""
    document = read_policy(script.POLICY)
    levels = [msgspec.structs.replace(one, paths=one.paths // 16) for one in document.levels]
    target = msgspec.structs.replace(document.target, rmse={name: 4 * r for name, r in document.target.rmse.items()})
    path = tmp_path / "p.json"
    path.write_text(policy_text(msgspec.structs.replace(document, levels=levels, target=target)), encoding="utf-8")
    assert script.main([str(path), "--seed", "3"]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert re.match(r"all float64 +\d\d\.\d+ \(0\.\d+\) +1\.\d+ \(0\.\d+\) +[\d,]+$", lines[1])
    assert re.match(r"by the policy +\d\d\.\d+ \(0\.\d+\) +1\.\d+ \(0\.\d+\) +[\d,]+$", lines[2])
    assert lines[-1] == "Both reach the target and agree."
    worse = msgspec.structs.replace(target, rmse={name: r / 4 for name, r in target.rmse.items()})
    path.write_text(policy_text(msgspec.structs.replace(document, levels=levels, target=worse)), encoding="utf-8")
    assert script.main([str(path), "--seed", "3"]) == 1
    assert capsys.readouterr().out.splitlines()[-1] == "They miss the target, or do not agree."
