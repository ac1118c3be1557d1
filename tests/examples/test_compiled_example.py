"""The compiled example: built with the commands it prints, audited, and held against its emulated source bit for bit.

Every case counts the paths of one block that differ, on the same draws. NumPy's float16 and C's _Float16 are correctly
rounded for + - * / and square roots (IEEE 754), so that no tolerance is needed.
"""

from __future__ import annotations

import shutil
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from compiled_builds import FOLDER, built, needs_fma, needs_half, small
from example_files import EXAMPLES

from narrowgauge.api import run_audit, try_out
from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.kernel.auditfile import AuditFile, audit_file_from, read_audit_file
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.calls import Quantities

PATHS = 20_000
LEVELS = (0, 4)  # 2 and 32 steps


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return Path(shutil.copytree(FOLDER, tmp_path_factory.mktemp("examples") / "compiled"))


def emulated(folder: Path) -> BlockRunner:
    """The emulated source of the compiled kernel, by the same audit file."""
    asked = tomllib.loads((folder / "rounded.toml").read_text(encoding="utf-8"))
    del asked["library"], asked["branches"]
    asked["kernel"]["run"] = f"{folder / 'reserve.py'}:value"
    return runner_of(audit_file_from(asked))


def runner_of(file: AuditFile) -> BlockRunner:
    return BlockRunner(file, find_kernel(file))


def results(runner: BlockRunner, arm: str, level: int) -> Quantities:
    draws = runner.draws(level, 0)
    return runner.caller(arithmetic_named(arm)).fine(draws, level)


def differing(one: BlockRunner, other: BlockRunner, arm: str) -> dict[tuple[int, str], int]:
    """How many of the first 20,000 paths differ in any bit, by level and quantity."""
    found = {}
    for level in LEVELS:
        here, there = results(one, arm, level), results(other, arm, level)
        assert here.keys() == there.keys() == {"option", "output"}
        for name in here:
            a, b = here[name][:PATHS].view(np.int64), there[name][:PATHS].view(np.int64)
            assert a.size == PATHS
            found[level, name] = int(np.count_nonzero(a != b))
    return found


@needs_half
@pytest.mark.parametrize("arm", ["float16", "float32", "float64"])
def test_a_build_that_rounds_every_operation_has_the_bits_of_the_emulation(folder: Path, arm: str) -> None:
    """0 of 20,000 paths differ, on 2 and on 32 steps, in either quantity."""
    runner = runner_of(built(folder, "rounded"))
    assert set(differing(runner, emulated(folder), arm).values()) == {0}


@needs_half
def test_wider_intermediates_differ_in_half_precision_alone(folder: Path) -> None:
    """GCC's default keeps an expression's intermediates in float: nearly half of the payoffs after 32 steps.

    In float32 and float64 the two builds are the same code.
    """
    runner, source = runner_of(built(folder, "wider")), emulated(folder)
    found = differing(runner, source, "float16")
    assert found[4, "option"] > PATHS / 3
    assert found[4, "output"] > PATHS / 5
    assert min(found.values()) > PATHS / 20
    for arm in ("float32", "float64"):
        assert set(differing(runner, source, arm).values()) == {0}


@needs_half
@needs_fma
def test_fused_products_differ_in_single_and_double_precision(folder: Path) -> None:
    """With -ffp-contract=fast a product feeds a sum unrounded; half precision, computed in float, has no such sum."""
    runner, source = runner_of(built(folder, "fused")), emulated(folder)
    for arm in ("float32", "float64"):
        found = differing(runner, source, arm)
        assert found[4, "option"] > PATHS / 3
        assert min(found.values()) > PATHS / 20


@needs_half
def test_the_turbines_output_is_that_of_the_reserve_example(folder: Path) -> None:
    """The river does not know the price: examples/reserve gives the same bits for it in every format."""
    runner = runner_of(built(folder, "rounded"))
    reserve = read_audit_file(EXAMPLES / "reserve" / "reserve.toml")
    river = ("inflow_start", "inflow_level", "inflow_reversion", "inflow_volatility", "correlation", "turbine_limit")
    there = tomllib.loads((folder / "rounded.toml").read_text(encoding="utf-8"))["parameters"]
    assert [reserve.parameters[name] for name in river] == [there[name] for name in river]
    for arm in ("float16", "float32", "float64"):
        here, other = results(runner, arm, 4), results(runner_of(reserve), arm, 4)
        assert np.array_equal(here["output"], other["output"])
        assert not np.array_equal(here["option"], other["option"])


@needs_half
def test_the_canary_sees_the_state_and_not_the_expressions(folder: Path) -> None:
    """Both builds round their state in the format; that one keeps wider intermediates does not show from outside."""
    for name in ("rounded", "wider"):
        canary = try_out(built(folder, name)).canary or []
        assert {(entry.arm, entry.finding) for entry in canary} == {
            ("float16", "rounds"),
            ("float32", "rounds"),
            ("float64", "unknown"),
        }


@needs_half
def test_the_whole_audit_of_the_library(folder: Path, tmp_path: Path) -> None:
    """Runs in a worker process, gives a verdict for each format, and ends with the same bytes a second time."""
    file = small(built(folder, "rounded"))
    records = []
    for number in (1, 2):
        result = run_audit(file, tmp_path / str(number))
        assert result.record.provenance["engine"] == "1 worker process"
        assert set(result.record.verdict.finest_paying_level) == {"float16", "float32"}
        document = result.record.document()
        del document["provenance"]
        records.append(document)
    assert records[0] == records[1]


def test_the_whole_audit_of_the_command(folder: Path) -> None:
    """A C++ program that exchanges files gives the bits of its emulated source, and is audited to the end."""
    file = small(built(folder, "inflow"))
    asked: dict[str, Any] = tomllib.loads((folder / "inflow.toml").read_text(encoding="utf-8"))
    del asked["command"]
    (folder / "inflow.py").write_text(INFLOW, encoding="utf-8")
    asked["kernel"]["run"] = f"{folder / 'inflow.py'}:output"
    source = runner_of(audit_file_from(asked))
    runner = runner_of(file)
    for arm in ("float32", "float64"):
        draws = runner.draws(3, 0)
        here = runner.caller(arithmetic_named(arm)).fine(draws, 3)
        there = source.caller(arithmetic_named(arm)).fine(draws, 3)
        assert np.array_equal(here["output"], there["output"])
    record = run_audit(file, None).record
    assert record.kernel.run == "./inflow"
    assert record.verdict.finest_paying_level["float32"].level == 4


INFLOW = """
import numpy as np

def output(dB, h, *, start, level, reversion, volatility, limit):
    q = np.full(dB.shape[1], start)
    total = np.zeros(dB.shape[1])
    for db in dB:
        water = np.maximum(q, 0.0)
        total = total + np.minimum(water, limit) * h
        q = q + (reversion * h * (level - water) + volatility * np.sqrt(water) * db)
    return {"output": total / (len(dB) * h)}
"""
