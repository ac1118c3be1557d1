"""How a gate draws: seeds of its own, and a reduced audit."""

import msgspec
import pytest

from narrowgauge.conduct.gate import gate_seed, reduced
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.gatetable import GateSettings
from narrowgauge.record.policy import CostPart

MAPPING = {
    "kernel": {"run": "model.py:value", "takes": "increments"},
    "ladder": {"horizon": 1.0, "finest": 2},
    "formats": {"narrow": ["float16", "bfloat16", "float32"]},
    "sampling": {"paths": 32768, "most_paths": 131072},
}
STEPS = {"float64": 1.0, "float32": 0.6, "float16": 0.3}
COST = CostPart(source="measured", steps=STEPS, draws=0.0, approximate_draws=None, path=0.0)


def held(tmp_path, **more):
    return GateSettings(policy=tmp_path / "p.json", **more)


def test_seeds_are_apart_and_the_same_every_time():
    """Of stages, and of policies; none is the audit's own."""
    seeds = [gate_seed(seed, stage) for seed in range(50) for stage in (1, 2)]
    assert len(set(seeds)) == 100
    assert not set(seeds) & set(range(50))
    assert all(0 <= seed < 2**63 for seed in seeds)
    assert seeds[2] == gate_seed(1, 1)


@pytest.mark.parametrize(
    ("arms", "narrow"),
    [
        ({"float16", "float32"}, ("float16", "float32")),
        ({"float16", "float64"}, ("float16",)),
        ({"float64"}, ("float16",)),
    ],
)
def test_only_formats_of_the_policy_are_run(tmp_path, arms, narrow):
    """The wide ones stay, since edges are measured against them."""
    file = reduced(audit_file_from(MAPPING), arms, COST, held(tmp_path), seed=5, confidence=0.999)
    assert file.formats.narrow == narrow
    assert file.formats.wide == ("float32", "float64")
    assert (file.sampling.seed, file.sampling.confidence) == (5, 0.999)


@pytest.mark.parametrize(
    ("more", "block", "paths", "most"),
    [
        ({}, 8192, 8192, 131072),
        ({"paths": 3000}, 3072, 3000, 131072),
        ({"paths": 65536, "most_paths": 65536}, 32768, 65536, 65536),
        ({"paths": 2**18}, 32768, 2**18, 2**18),
    ],
)
def test_paths_are_those_of_the_gate(tmp_path, more, block, paths, most):
    """Blocks are no larger than the first look; the budget is that of the audit file where the gate has none."""
    sampling = reduced(
        audit_file_from(MAPPING), {"float16"}, COST, held(tmp_path, **more), seed=1, confidence=0.9
    ).sampling
    assert (sampling.block, sampling.paths, sampling.most_paths) == (block, paths, most)


def test_approximate_draws_are_run_where_the_policy_uses_them(tmp_path):
    """And left out where it does not."""
    file = audit_file_from({**MAPPING, "draws": {"approximate": "constant"}})
    without = reduced(file, {"float16"}, COST, held(tmp_path), seed=1, confidence=0.9)
    assert without.draws is None
    there = reduced(file, {"float16/approximate", "float32"}, COST, held(tmp_path), seed=1, confidence=0.9)
    assert there.draws.formats == ("float16",)
    assert there.arms == ("float16", "float32", "float64", "float16/approximate", "float64/approximate")


def test_costs_that_were_measured_are_those_of_the_policy(tmp_path):
    """The machine of a gate may be slow or busy; costs that were given, and of a format that was not, stay."""
    kernel = {**MAPPING["kernel"], "rounds": "itself"}
    formats = {"narrow": ["float16"], "wide": ["float32"]}
    file = audit_file_from({**MAPPING, "kernel": kernel, "formats": formats, "cost": {"measured": True}})
    made = reduced(file, {"float16", "float32"}, COST, held(tmp_path), seed=1, confidence=0.9)
    assert not made.cost.measured
    assert {name: made.cost.step(name) for name in STEPS} == STEPS
    fewer = msgspec.structs.replace(COST, steps={"float64": 1.0, "float16": 0.3})
    assert reduced(file, {"float16"}, fewer, held(tmp_path), seed=1, confidence=0.9).cost.measured
    given = msgspec.structs.replace(COST, source="given")
    assert (
        reduced(audit_file_from(MAPPING), {"float16"}, given, held(tmp_path), seed=1, confidence=0.9).cost.float32
        == 0.5
    )
