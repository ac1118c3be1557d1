"""The verdict, tried in a box of parameters: what is refused, what is claimed, and the same bits whoever runs it."""

from __future__ import annotations

import re
import signal
import sqlite3
import subprocess
import sys
from collections.abc import Sequence
from contextlib import closing
from pathlib import Path
from typing import Any

import msgspec
import pytest
from audit_cases import audited, file_for

from narrowgauge.api import run_audit
from narrowgauge.conduct.run import Plan
from narrowgauge.errors import KernelError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.store import LEDGER
from narrowgauge.measure.workers import Workers
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.canonical import canonical_text
from narrowgauge.record.domain import DomainEntry, ScenarioEntry

# A price path, as a share of where it began: only the size of its numbers depends on spot.
PRICE = """
import numpy as np

def value(dW, h, *, spot, volatility):
    x = np.full(dW.shape[-1], spot)
    for dw in dW:
        x = x + (0.05 * h * x + volatility * x * dw)
    return x / spot
"""
FORMATS = {"narrow": '["float16"]', "wide": '["float64"]'}
WIDE = 'spot = { low = 50.0, high = 1e5, scale = "log" }'  # float16 ends at 65,504
NARROW = 'spot = { low = 50.0, high = 200.0, scale = "log" }'
VOLATILITY = "volatility = { low = 0.1, high = 0.4 }"
needs_signals = pytest.mark.skipif(sys.platform == "win32", reason="signals are sent otherwise there")


def boxed(*sides: str, **domain: str) -> dict[str, Any]:
    """Tables of an audit of two levels whose box has these sides, and 8 scenarios beside the corners."""
    return {
        "parameters": {"spot": "100.0", "volatility": "0.2"},
        "ladder": {"finest": "1"},
        "formats": FORMATS,
        "domain": {"parameters": "{ " + ", ".join(sides) + " }", "scenarios": "8", "most_paths": "2048", **domain},
    }


def domain_of(record: AuditRecord) -> DomainEntry:
    assert record.domain is not None
    return record.domain


def explored(folder: Path, source: str, *sides: str, **domain: str) -> DomainEntry:
    return domain_of(audited(folder, source, **boxed(*sides, **domain)).record)


def text(record: AuditRecord) -> str:
    """The record as it is written, without the one part that may differ between two runs."""
    return canonical_text(msgspec.structs.replace(record, provenance={}).document())


def failed(domain: DomainEntry) -> list[ScenarioEntry]:
    return [one for one in domain.scenarios if one.outcome != "passes"]


def test_where_all_scenarios_pass_the_box_is_claimed_whole(tmp_path: Path) -> None:
    """8 of 8 prove that less than 1 - .05^(1/8) of the box fails, corners not counted."""
    domain = explored(tmp_path, PRICE, NARROW, VOLATILITY)
    assert [one.outcome for one in domain.scenarios] == ["passes"] * 12
    assert [one.kind for one in domain.scenarios] == ["drawn"] * 8 + ["corner"] * 4
    assert domain.claimed is not None
    assert (domain.claimed.share, domain.claimed.scenarios) == (1.0, 12)
    assert {name: (one.low, one.high) for name, one in domain.claimed.parameters.items()} == {
        "spot": (50.0, 200.0),
        "volatility": (0.1, 0.4),
    }
    assert (domain.proof.passed, domain.proof.drawn) == (8, 8)
    assert (1 - domain.proof.fails_below) ** 8 == pytest.approx(0.05)
    assert all(level.scheme.narrow == "float16" and level.outcome == "passes" for level in domain.levels)


def test_a_corner_that_overflows_is_refused_and_cut_off(tmp_path: Path) -> None:
    """float16 has no 100,000: the scenarios that come so far fail, are named, and shrink what is claimed."""
    domain = explored(tmp_path, PRICE, WIDE, VOLATILITY)
    lost = failed(domain)
    assert {(one.outcome, one.reason) for one in lost} == {("refused", "nonfinite")}
    assert [one.parameters["spot"] for one in lost if one.kind == "corner"] == [1e5, 1e5]
    least = min(one.parameters["spot"] for one in lost)
    passing = [one.parameters["spot"] for one in domain.scenarios if one.outcome == "passes"]
    assert domain.claimed is not None
    spot = domain.claimed.parameters["spot"]
    assert (spot.low, spot.high) == (50.0, max(passing))
    assert max(passing) < 65_504 < 1e5 / 1.2
    assert spot.high < least
    assert 0.5 < domain.claimed.share < 1.0
    level = domain.levels[0]
    assert (level.outcome, level.reason) == ("refused", "nonfinite")
    assert level.decided_by in {one.number for one in lost}
    assert level.arms["float16"].nonfinite > 0
    assert level.arms["float16"].nonfinite_at in {one.number for one in lost}
    assert all(one.outcome == "passes" for one in domain.claimed.levels)


def test_where_the_reference_raises_a_scenario_is_refused_by_name(tmp_path: Path) -> None:
    """What the kernel cannot do is no part of the domain; the message says what it raised, and the audit goes on."""
    source = PRICE.replace("    x = np", "    if spot > 150.0:\n        raise ValueError('too dear')\n    x = np")
    domain = explored(tmp_path, source, NARROW)
    lost = failed(domain)
    assert lost
    assert {one.reason for one in lost} == {"reference"}
    assert {one.message for one in lost} == {"level 0, arm float64: the kernel raised ValueError: too dear"}
    assert all(one.parameters["spot"] > 150.0 for one in lost)
    assert all(one.parameters["spot"] <= 150.0 for one in domain.scenarios if one not in lost)


def test_what_a_narrow_format_alone_raises_refuses_its_schemes(tmp_path: Path) -> None:
    """There float16 does not pay, and the scenario is refused since the verdict would use it."""
    source = PRICE.replace(
        "    return x", "    if not np.isfinite(x).all():\n        raise OverflowError\n    return x"
    )
    domain = explored(tmp_path, source, WIDE)
    lost = failed(domain)
    assert {(one.reason, one.message) for one in lost} == {("raised", None)}
    assert domain.levels[0].arms["float16"].raised_at == lost[0].number


def test_paths_that_the_reference_loses_refuse_a_scenario(tmp_path: Path) -> None:
    """Of them nothing is known, in any format."""
    source = PRICE.replace("return x / spot", "return np.where((x > 1.3 * spot) & (spot > 150.0), np.nan, x / spot)")
    lost = failed(explored(tmp_path, source, NARROW))
    assert lost
    assert {one.reason for one in lost} == {"reference"}
    assert all((one.message or "").startswith("level 0: the reference is not finite on ") for one in lost)


def test_what_is_undecided_is_no_pass(tmp_path: Path) -> None:
    """A yes/no payoff that fewer and fewer paths decide: the far scenarios are looked at to the end, and left out."""
    source = PRICE.replace("return x / spot", "return np.where(x > spot, 1.0, 0.0)").replace("+ volatility", "+ 0.2")
    source = source.replace("x > spot", "x > volatility * spot")
    sides = "volatility = { low = 0.9, high = 1.9 }"
    tables = boxed(sides)
    tables |= {"parameters": {"spot": "100.0", "volatility": "1.0"}, "ladder": {"finest": "0"}}
    tables |= {"sampling": {"most_paths": "65536", "paths": "65536", "block": "65536"}}
    domain = domain_of(audited(tmp_path, source, **tables).record)
    lost = failed(domain)
    assert lost
    assert {one.outcome for one in lost} == {"undecided"}
    assert all(one.levels[0].paths == 2048 for one in lost)
    assert domain.claimed is not None
    claimed = domain.claimed.parameters["volatility"]
    assert claimed.low <= 1.0 <= claimed.high
    assert not [one for one in lost if claimed.low <= one.parameters["volatility"] <= claimed.high]


def test_where_the_verdict_is_open_the_reference_is_tried(tmp_path: Path) -> None:
    """float32 costs here what float64 does, so that nothing pays; the reference alone passes everywhere."""
    tables = boxed(NARROW)
    tables |= {"formats": {"narrow": '["float32"]', "wide": '["float64"]'}, "cost": {"float64": "1", "float32": "1"}}
    domain = domain_of(audited(tmp_path, PRICE, **tables).record)
    assert [(level.scheme.narrow, level.outcome) for level in domain.levels] == [("float64", "passes")] * 2


def test_without_a_box_there_is_no_domain(tmp_path: Path) -> None:
    """The record has null there."""
    tables = {name: table for name, table in boxed(NARROW).items() if name != "domain"}
    assert audited(tmp_path, PRICE, **tables).record.domain is None


def test_two_workers_give_the_same_bits(tmp_path: Path) -> None:
    """Scenarios included, whichever worker runs which, and a kernel that raises in them too."""
    source = PRICE.replace("    x = np", "    if spot > 5e4:\n        raise ValueError('too dear')\n    x = np")
    file = file_for(tmp_path, source, **boxed(WIDE, VOLATILITY))
    alone, two = (run_audit(file, None, workers=Workers(number=number)).record for number in (1, 2))
    assert {one.reason for one in failed(domain_of(alone))} >= {"reference"}
    assert text(alone) == text(two)


def test_the_scenarios_of_a_generator_couple_as_the_audit_does(tmp_path: Path) -> None:
    """How its requests belong to steps is worked out once, at the audited point."""
    source = """
    import numpy as np

    def value(rng, h, *, steps, paths, spot, volatility):
        x = np.full(paths, spot)
        for _ in range(steps):
            x = x + volatility * np.sqrt(h) * x * rng.standard_normal(paths)
        return x / spot
    """
    tables = boxed(NARROW) | {"kernel": {"takes": '"rng"'}}
    domain = domain_of(audited(tmp_path, source, **tables).record)
    assert not failed(domain)


def test_want_of_memory_is_no_result(tmp_path: Path) -> None:
    """It ends the audit, as it does at the audited point; nothing is refused for it."""
    source = PRICE.replace("    x = np", "    if spot > 150.0:\n        raise MemoryError\n    x = np")
    with pytest.raises(KernelError, match="MemoryError"):
        run_audit(file_for(tmp_path, source, **boxed(NARROW)), None)


def test_a_kernel_that_ends_its_worker_is_told_with_the_scenario(tmp_path: Path) -> None:
    """Where it happened is said in the parameters: at the audited point the kernel does no such thing."""
    source = PRICE.replace("    x = np", "    import os\n    if spot > 199.0:\n        os._exit(3)\n    x = np")
    file = file_for(tmp_path, source, **boxed(NARROW))
    with pytest.raises(KernelError) as caught:
        run_audit(file, None, workers=Workers(timeout=600.0))
    where = r"scenario 10 \(spot = 200\), look 1: the process that ran the kernel "
    assert re.match(where + r".* 3, twice$", str(caught.value)), str(caught.value)


class Log:
    """A watcher that keeps what it hears of scenarios."""

    def __init__(self) -> None:
        self.plans: list[Plan] = []
        self.heard: list[tuple[int, int, int]] = []
        self.told = self.done = 0

    def planned(self, plan: Plan) -> None:
        self.plans.append(plan)

    def look(self, number: int, looks: int, levels: Sequence[int], path_steps: int) -> None: ...

    def scenarios(self, number: int, looks: int, scenarios: int, path_steps: int) -> None:
        self.heard.append((number, looks, scenarios))
        self.told += path_steps

    def advanced(self, steps: int) -> None:
        self.done += steps if self.heard else 0


def test_a_watcher_hears_of_scenarios(tmp_path: Path) -> None:
    """The plan counts them, each look says how many draw more, and all path steps that it says are done."""
    log = Log()
    record = run_audit(file_for(tmp_path, PRICE, **boxed(WIDE)), None, watcher=log).record
    plan = log.plans[0].domain
    assert plan is not None
    assert (plan.drawn, plan.corners, plan.paths, plan.most_paths, plan.kept) == (8, 2, 1024, 2048, 0)
    assert 0 < plan.seconds < plan.most_seconds
    assert log.heard[0] == (1, 2, 10)
    assert log.told == log.done == domain_of(record).path_steps
    # Two levels of 1 and 2 + 1 steps in two arms, at 1,024 paths each.
    assert plan.path_steps == 10 * 1024 * (1 + 3) * 2
    assert domain_of(record).share_of_audit == domain_of(record).path_steps / log.plans[0].path_steps


# Says a dot for each look at a scenario that is kept, and stands still after so many.
DRIVER = """
import sys
import time
from pathlib import Path
from narrowgauge.api import run_audit
from narrowgauge.kernel.auditfile import read_audit_file
from narrowgauge.measure import store

store._TOGETHER = 0.0

class Watcher:
    left = None
    def planned(self, plan):
        pass
    def look(self, *_):
        pass
    def scenarios(self, *_):
        self.left = int(sys.argv[3])
    def advanced(self, steps):
        if self.left is not None:
            self.left -= 1
            if self.left == 0:
                print(".", flush=True)
                time.sleep(600)

run_audit(read_audit_file(Path(sys.argv[1])), Path(sys.argv[2]), resume=True, watcher=Watcher())
"""


@needs_signals
def test_an_audit_that_is_killed_among_its_scenarios_goes_on_there(tmp_path: Path) -> None:
    """Those that were finished are not run again, and the end is that of an undisturbed audit."""
    file = file_for(tmp_path, PRICE, **boxed(WIDE, VOLATILITY))
    out = tmp_path / "out"
    command = [sys.executable, "-c", DRIVER, file.source, str(out), "5"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as driver:
        assert driver.stdout is not None
        assert driver.stdout.readline() == ".\n"
        driver.kill()
    assert driver.returncode == -signal.SIGKILL
    log, before = Log(), looks(out)
    assert len(before) == 5
    resumed = run_audit(file, out, resume=True, watcher=log).record
    # The seconds that a look took are those of its only run.
    assert before.items() <= looks(out).items()
    assert len(looks(out)) > 5
    assert resumed.provenance["resumed_looks"] == 5
    assert log.plans[0].domain is not None
    assert log.plans[0].domain.kept == 5
    assert text(resumed) == text(undisturbed(file))


def looks(folder: Path) -> dict[tuple[int, int], float]:
    """Seconds by scenario and look, as the ledger has them."""
    with closing(sqlite3.connect(folder / LEDGER)) as connection:
        return {
            tuple(key): seconds for *key, seconds in connection.execute("SELECT scenario, look, seconds FROM looks")
        }


def undisturbed(file: AuditFile) -> AuditRecord:
    return run_audit(file, None).record
