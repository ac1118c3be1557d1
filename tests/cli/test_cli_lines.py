"""The option --lines: what it prints, says and writes."""

from __future__ import annotations

from pathlib import Path

import pytest

from narrowgauge.cli import main

KERNEL = """\
import numpy as np


def value(dW, h):
    x = np.ones_like(dW[0])
    for dw in dW:
        x = x + 0.2 * x * dw
    return x
"""
AUDIT = """\
[kernel]
run = "kernel.py:value"
takes = "increments"

[ladder]
horizon = 1.0
finest = 5

[formats]
narrow = ["bfloat16"]

[cost]
float64 = 1.0
float32 = 0.9
bfloat16 = 0.6

[sampling]
block = 1024
paths = 4096
most_paths = 4096
"""


@pytest.fixture
def audit(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "kernel.py").write_text(KERNEL, encoding="utf-8")
    (tmp_path / "audit.toml").write_text(AUDIT, encoding="utf-8")
    return tmp_path


def test_lines_of_the_source_are_shown(audit: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The source with its shares, what widening buys, the file that holds the rest, and a word before it is begun."""
    assert main(["audit", "audit.toml", "--lines"]) == 0
    out, said = capsys.readouterr()
    assert "narrowgauge: all levels are measured; the lines of bfloat16 are studied" in said
    assert "\nLines of bfloat16\n" in out
    (line,) = [line for line in out.splitlines() if line.startswith("        x = x + 0.2 * x * dw")]
    assert line.endswith("%")
    assert "#" in line
    assert "lines.csv (one row per format, quantity and line)" in " ".join(out.split())
    assert (audit / "audits" / "audit" / "lines.csv").exists()


def test_quiet_and_without_the_option(audit: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Without it there is a hint and no file; with --quiet nothing is said while it runs."""
    assert main(["audit", "audit.toml", "--quiet", "--out", "plain"]) == 0
    out, said = capsys.readouterr()
    assert "The option --lines finds out which lines cost bfloat16 its accuracy." in " ".join(out.split())
    assert not (audit / "plain" / "lines.csv").exists()
    assert main(["audit", "audit.toml", "--quiet", "--lines", "--out", "lines"]) == 0
    out, said = capsys.readouterr()
    assert said == ""
    assert "--lines finds out" not in out
    assert (audit / "lines" / "lines.csv").exists()
