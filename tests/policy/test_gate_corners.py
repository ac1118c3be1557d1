"""Whole gates of a policy that claims a box of parameters: they try its corners."""

import dataclasses
import math

import msgspec
import pytest

from narrowgauge.api import gate_held, run_audit
from narrowgauge.conduct.gate import claimed_corners
from narrowgauge.kernel.auditfile import audit_file_from, read_audit_file
from narrowgauge.measure.workers import Workers
from narrowgauge.policy.drawup import draw_up, read_audit, write_policy
from narrowgauge.policy.gatefile import held_to
from narrowgauge.policy.gatefinished import judge_finished
from narrowgauge.record.policy import ParameterPart

MAPPING = {
    "kernel": {"run": "model.py:value", "takes": "increments"},
    "parameters": {"a": 1.0, "b": 2, "c": 3.0, "d": 4.0, "e": 5.0},
    "ladder": {"horizon": 1.0, "finest": 1},
    "sampling": {"confidence": 0.999},
}


@pytest.mark.parametrize(
    ("sides", "corners"),
    [
        ("a", [(0.0,), (9.0,)]),
        ("abc", [(x, y, z) for x in (0.0, 9.0) for y in (0.0, 9.0) for z in (0.0, 9.0)]),
        ("abcd", [tuple({place: end}.get(side, side + 1.0) for side in range(4)) for place in range(4)
                  for end in (0.0, 9.0)]),
    ],
)  # fmt: skip
def test_corners_are_all_up_to_eight_and_else_both_ends_of_each_side(sides, corners):
    """With the quantities they share the gate's rate of error."""
    file = audit_file_from(MAPPING)
    parameters = {
        name: ParameterPart(low=0.0, high=9.0, scale="linear") if name in sides else ParameterPart(fixed=value)
        for name, value in file.parameters.items()
    }
    arms = {0: ("float16", "float32"), 1: ("float64",)}
    asked = claimed_corners(file, parameters, arms, quantities=2, least_edge=0.9)
    boxed, scenarios = asked.asked(file)
    assert [one.values for one in scenarios] == corners
    assert list(boxed.domain.parameters) == list(sides)
    assert 1 - boxed.sampling.confidence == pytest.approx(0.001 / len(corners) / 2)
    assert [(one.kind, one.narrow, one.wide) for one in asked.schemes.values()] == [
        ("split", "float16", "float32"),
        ("alone", "float64", None),
    ]


# A price path, as a share of where it began. INVENTED DATA.
KERNEL = """
import numpy as np

def value(dW, h, *, spot, volatility):
    x = np.full(dW.shape[-1], spot)
    for dw in dW:
        x = x + (0.05 * h * x + volatility * x * dw)
    return x / spot
"""
AUDIT = """
[kernel]
run = "model.py:value"
takes = "increments"

[parameters]
spot = 100.0
volatility = 0.2

[ladder]
horizon = 1.0
finest = 1

[target]
rmse = 0.01

[formats]
narrow = ["float16"]
wide = ["float64"]

[sampling]
block = 8192
paths = 8192
most_paths = 65536

[domain]
parameters.spot = { low = 50.0, high = 200.0, scale = "log" }
parameters.volatility = { low = 0.1, high = 0.4 }
scenarios = 8
most_paths = 4096
"""


BOXED = (("spot", 50.0, 200.0), ("volatility", 0.1, 0.4))


@pytest.fixture(scope="module")
def audit(tmp_path_factory):
    """An audit file whose policy claims its whole box, with its finished audit in `out`."""
    folder = tmp_path_factory.mktemp("boxed")
    (folder / "model.py").write_text(KERNEL, encoding="utf-8")
    (folder / "audit.toml").write_text(AUDIT, encoding="utf-8")
    run_audit(read_audit_file(folder / "audit.toml"), folder / "out")
    document = draw_up(*read_audit(folder / "out"))
    assert document.domain.parameters["spot"].high == 200.0
    write_policy(document, folder / "audit.policy.json")
    return folder / "audit.toml"


@pytest.mark.parametrize(("least", "paths"), [(0.9, 1024), (math.inf, 4096)])
def test_a_corner_whose_edge_has_come_near_enough_draws_no_more_paths(audit, least, paths):
    """Of a format that costs what float64 costs it is about 1: no number of paths would show it to be above."""
    box = {name: ParameterPart(low=low, high=high, scale="linear") for name, low, high in BOXED}
    file = read_audit_file(audit)
    cost = msgspec.structs.replace(file.cost, float16=1.0, float64=1.0)
    sampling = msgspec.structs.replace(file.sampling, most_paths=8192, confidence=0.999)
    file = msgspec.structs.replace(file, cost=cost, sampling=sampling, domain=None)
    asked = claimed_corners(file, box, dict.fromkeys((0, 1), ("float16",)), quantities=1, least_edge=least)
    asked = dataclasses.replace(asked, domain=msgspec.structs.replace(asked.domain, most_paths=4096))
    record = run_audit(file, None, corners=asked, watched=False).record
    assert [one.kind for one in record.domain.scenarios] == ["corner"] * 4
    assert max(level.paths for one in record.domain.scenarios for level in one.levels) == paths
    assert all(level.edge_low > 0.9 for one in record.domain.scenarios for level in one.levels)


def gated(audit, source, folder):
    """The gate of a kernel with the policy of another."""
    (folder / "model.py").write_text(source, encoding="utf-8")
    for name in ("audit.toml", "audit.policy.json"):
        (folder / name).write_bytes((audit.parent / name).read_bytes())
    return gate_held(held_to(folder / "audit.toml"), who=Workers())


def test_an_unchanged_kernel_passes_at_the_corners(audit, tmp_path):
    """Four of them, on each level; and its finished audit is judged by its scenarios."""
    entry = gated(audit, KERNEL, tmp_path)
    assert entry.verdict == "pass", [one.message for one in entry.findings if one.state != "holds"]
    corners = [one for one in entry.findings if one.check == "domain"]
    assert [one.level for one in corners] == [0, 1]
    assert all("4 of the 4 points" in one.message for one in corners)
    measured = [one for one in judge_finished(held_to(audit), audit.parent / "out").findings if one.check == "domain"]
    assert [one.state for one in measured] == ["holds", "holds"]
    assert all("12 of the 12 points" in one.message for one in measured)


@pytest.mark.parametrize(
    ("change", "stages", "said"),
    [
        (("return x / spot", "return x * 250.0 / 250.0 / spot"), 1, "spot = 200"),
        (
            ("return x / spot", "far = 4e4 * (volatility < 0.15)\n    return ((x + far) - far) / spot"),
            2,
            "volatility = 0.1",
        ),
        (
            ("    x = np", "    if volatility > 0.3:\n        raise ValueError('wild')\n    x = np"),
            1,
            "ValueError: wild",
        ),
    ],
)
def test_a_mistake_that_only_a_corner_shows_is_caught(audit, tmp_path, change, stages, said):
    """A price that overflows float16, a difference of large numbers, an exception: nothing else fails.

    Predicted power: above .9999 each. Half of the paths overflow; the edge is below a half.
    """
    old, new = change
    assert KERNEL.count(old) == 1
    entry = gated(audit, KERNEL.replace(old, new), tmp_path)
    assert entry.verdict == "fail"
    failed = [one for one in entry.findings if one.state == "fails"]
    assert {one.check for one in failed} == {"domain"}
    assert all(said in one.message and one.stages == stages for one in failed)


def test_a_kernel_that_ends_its_process_at_a_corner_never_passes(audit, tmp_path):
    """The audited point does not show it."""
    entry = gated(
        audit,
        KERNEL.replace("    x = np", "    if volatility > 0.3:\n        raise SystemExit(0)\n    x = np"),
        tmp_path,
    )
    assert entry.verdict == "fail"
    assert any("SystemExit" in one.message for one in entry.findings if one.state == "fails")
