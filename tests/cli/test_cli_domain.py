"""Scenarios on the command line: what --dry and the plan say of them, and what the audit shows."""

from __future__ import annotations

from pathlib import Path

from test_cli import run

KERNEL = """
import numpy as np


def price(dW, h, *, spot):
    x = np.full(dW.shape[-1], spot)
    for dw in dW:
        x = x + 0.2 * x * dw
    return x / spot
"""
AUDIT = """
[kernel]
run = "kernel.py:price"
takes = "increments"
[parameters]
spot = 100.0
[ladder]
horizon = 1.0
finest = 1
[formats]
narrow = ["float16"]
wide = ["float64"]
[sampling]
block = 1024
paths = 1024
most_paths = 1024
[domain]
parameters.spot = { low = 50.0, high = 1e5, scale = "log" }
scenarios = 4
most_paths = 2048
"""


def written(folder: Path) -> str:
    (folder / "kernel.py").write_text(KERNEL, encoding="utf-8")
    (folder / "audit.toml").write_text(AUDIT, encoding="utf-8")
    return "audit.toml"


def words(text: str) -> str:
    return " ".join(text.split())


def test_a_dry_run_says_how_many_scenarios_there_would_be(tmp_path: Path) -> None:
    """And runs none of them: the trial is of the audited point alone."""
    done = run("audit", written(tmp_path), "--dry", folder=tmp_path)
    assert done.returncode == 0, done.stderr
    assert words(done.stdout).endswith(
        "Scenarios: 4 drawn scenarios and 2 corners of [domain] would be tried, with 1,024 paths a level, and up to "
        "2,048 where that decides nothing."
    )
    assert not (tmp_path / "audits").exists()


def test_an_audit_plans_its_scenarios_and_shows_them(tmp_path: Path) -> None:
    """The plan has their number and share before anything is measured, the verdict what became of them."""
    done = run("audit", written(tmp_path), folder=tmp_path)
    assert done.returncode == 0, done.stderr
    planned, shown = words(done.stderr), words(done.stdout)
    # 6 scenarios of as many paths a level as the audit's own first look.
    assert "Then 4 drawn scenarios and 2 corners of [domain], 1,024 paths a level: 49,152 steps, 600%" in planned
    assert "corner 6 (spot = 100,000) is refused on levels 0 and 1: non-finite values." in shown
    assert "The verdict is claimed for spot from 50.00 to " in shown
