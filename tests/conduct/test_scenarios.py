"""Which scenarios a box has: scrambled Sobol points, then corners; all of it from the audit file alone."""

from __future__ import annotations

import itertools
from pathlib import Path

import numpy as np
import pytest
from audit_cases import GEOMETRIC, file_for

from narrowgauge.conduct.scenarios import block_of, looks_of, scenarios_of
from narrowgauge.draws.streams import Purpose, uniforms
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner


def boxed(folder: Path, sides: int, seed: int = 1, **domain: str) -> AuditFile:
    """An audit file with so many parameters from 1 to 10,000 on a log scale, audited at 10."""
    names = [f"p{number}" for number in range(sides)]
    box = "{ " + ", ".join(f'{name} = {{ low = 1.0, high = 1e4, scale = "log" }}' for name in names) + " }"
    return file_for(
        folder,
        GEOMETRIC,
        parameters=dict.fromkeys(names, "10.0"),
        sampling={"seed": str(seed)},
        domain={"parameters": box, **domain},
    )


@pytest.mark.parametrize("number", [8, 32])
def test_each_side_is_spread_evenly(tmp_path: Path, number: int) -> None:
    """Of n = 2^m points each n-th of a side holds exactly one, on the side's own scale; plain random points miss some.

    That is the property of a Sobol sequence that scrambling keeps.
    """
    file = boxed(tmp_path, 3, scenarios=str(number))
    drawn = np.array([one.values for one in scenarios_of(file) if one.drawn])
    cells = np.sort(np.floor(np.log10(drawn) / 4 * number).astype(int), axis=0)
    assert (cells == np.arange(number)[:, None]).all()
    plain = np.sort(np.floor(np.random.default_rng(1).random((number, 3)) * number).astype(int), axis=0)
    assert (plain != np.arange(number)[:, None]).any()


@pytest.mark.parametrize("sides", [1, 2, 5])
def test_up_to_32_corners_are_all_there(tmp_path: Path, sides: int) -> None:
    """Each combination of ends, to the bit."""
    found = scenarios_of(boxed(tmp_path, sides))
    corners = [one.values for one in found if not one.drawn]
    assert corners == list(itertools.product((1.0, 1e4), repeat=sides))
    assert [one.number for one in found] == list(range(1, 33 + 2**sides))


def test_of_more_sides_both_ends_are_there(tmp_path: Path) -> None:
    """In turn, with all other parameters at the audited point."""
    corners = [one.values for one in scenarios_of(boxed(tmp_path, 6)) if not one.drawn]
    assert len(corners) == 12
    assert all(sorted(values)[1:5] == [10.0] * 4 for values in corners)
    assert {(values.index(end), end) for values in corners for end in values if end != 10.0} == {
        (side, end) for side in range(6) for end in (1.0, 1e4)
    }


def test_the_seed_of_the_audit_decides(tmp_path: Path) -> None:
    """The same file has the same scenarios, another seed others."""
    first, again, other = (scenarios_of(boxed(tmp_path, 2, seed)) for seed in (1, 1, 2))
    assert first == again
    assert not {one.values for one in first if one.drawn} & {one.values for one in other if one.drawn}


def test_looks_double_within_the_budget(tmp_path: Path) -> None:
    """And the blocks of a look are as large as what it adds, unless the audit's own are smaller."""
    file = boxed(tmp_path, 1, paths="1024", most_paths="10000")
    assert file.domain is not None
    looks = looks_of(file.domain)
    assert looks == [1024, 2048, 4096, 8192]
    assert [block_of(file, looks, look) for look in range(4)] == [1024, 1024, 1024, 1024]
    wider = file_for(tmp_path, GEOMETRIC, sampling={"block": "3072"})
    assert [block_of(wider, looks, look) for look in range(4)] == [1024, 1024, 2048, 3072]


def test_scenarios_have_draws_of_their_own() -> None:
    """No two blocks of scenarios, and none of the audit, share their numbers, whatever changes places in the key."""
    keys = [(level, block, scenario) for level in range(3) for block in range(3) for scenario in range(3)]
    drawn = {uniforms(1, Purpose.SCENARIO, level, block, (4,), scenario).tobytes() for level, block, scenario in keys}
    audit = {uniforms(1, Purpose.AUDIT, level, block, (4,)).tobytes() for level, block, _ in keys}
    assert len(drawn) == len(keys)
    assert not drawn & audit


@pytest.mark.parametrize("takes", ["increments", "rng"])
def test_a_scenarios_runner_has_draws_and_parameters_of_its_own(tmp_path: Path, takes: str) -> None:
    """Other numbers than the audit and than any other scenario, the same again for the same one, in smaller blocks."""
    source = "def value(dW, h, *, p0):\n    return p0 + dW.sum(axis=0)\n"
    if takes == "rng":
        source = (
            "def value(rng, h, *, steps, paths, p0):\n"
            "    return p0 + sum(h**0.5 * rng.standard_normal(paths) for _ in range(steps))\n"
        )
    tables = {"kernel": {"takes": f'"{takes}"'}, "sampling": {"block": "2048"}, "parameters": {"p0": "0.0"}}
    file = file_for(tmp_path, source, **tables)
    runner = BlockRunner(file, find_kernel(file))
    elsewhere = [runner.elsewhere(number, {"p0": 8.0}, 1024) for number in (1, 2, 1)]
    means = [one.run(2, 0).quantities["value"].values["float64"].moments.mean.tobytes() for one in elsewhere]
    assert means[0] == means[2] != means[1]
    assert runner.paths(2) == 2048
    tally = elsewhere[0].run(2, 1)
    assert tally.paths == 1024
    # Of 1,024 standard normals: 5 standard errors either side, a false alarm in 2 million.
    assert abs(tally.quantities["value"].values["float64"].moments.average - 8.0) < 5 / 32
    own = runner.run(2, 0).quantities["value"].values["float64"].moments
    assert abs(own.average) < 5 / 45
    first = runner.elsewhere(1, {"p0": 0.0}, 2048).run(2, 0).quantities["value"].values["float64"].moments
    assert first.mean.tobytes() != own.mean.tobytes()
