"""Libraries and commands in trouble: exit code 2, a message that says where, no traceback, finished blocks kept."""

from __future__ import annotations

import sqlite3
import sys
from pathlib import Path

import pytest
from test_cli import run

from narrowgauge.cli import main

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="processes end otherwise there")

ASKED = """
[kernel]
takes = "normals"
coupling = "none"
{table}
[ladder]
horizon = 1.0
finest = 2
[formats]
narrow = ["float32"]
wide = ["float64"]
[sampling]
block = 1024
paths = 1024
most_paths = 1024
"""
LIBRARY = '[library]\npath = "kernel.so"\nsymbol = "{symbol}"\noutputs = ["x"]'
COMMAND = '[command]\nrun = ["./kernel"]\noutputs = ["x"]'

# Sums up the draws; `trouble` comes when the paths of a block are asked for on level 1, of 2 steps.
SOURCE = """
#include <math.h>
#include <stddef.h>
#include <stdlib.h>
#define KERNEL(NAME, T, TROUBLE) \\
int NAME(const T *draws, size_t steps, size_t factors, size_t paths, double h, const double *p, size_t count, \\
         T *out, size_t outputs) \\
{ \\
    for (size_t i = 0; i < paths; i++) { \\
        T sum = 0; \\
        for (size_t n = 0; n < steps; n++) sum += draws[n * paths + i]; \\
        out[i] = sum; \\
    } \\
    if (steps == 2) { TROUBLE; } \\
    return 0; \\
}
KERNEL(sound_float32, float, )
KERNEL(sound_float64, double, )
KERNEL(crash_float32, float, *(volatile int *)0 = 1)
KERNEL(crash_float64, double, )
KERNEL(code_float32, float, return -5)
KERNEL(code_float64, double, )
KERNEL(nan_float32, float, )
KERNEL(nan_float64, double, out[3] = NAN)
KERNEL(half_float64, double, )
KERNEL(leave_float32, float, )
KERNEL(leave_float64, double, exit(0))
"""


def refused(folder: Path, capsys: pytest.CaptureFixture[str], *options: str) -> str:
    """Run the audit in its folder; returns its one line of complaint."""
    assert main(["audit", str(folder / "audit.toml"), "--out", str(folder / "out"), "--quiet", *options]) == 2
    said = capsys.readouterr()
    assert said.out == ""
    lines = [line for line in said.err.splitlines() if line.startswith("narrowgauge: ")]
    assert said.err == lines[0] + "\n"
    return lines[0].removeprefix("narrowgauge: ")


def kept(folder: Path) -> set[tuple[int, int]]:
    with sqlite3.connect(folder / "out" / "blocks.sqlite") as ledger:
        return set(ledger.execute("SELECT level, block FROM blocks"))


@pytest.fixture
def library(tmp_path: Path, compiled, monkeypatch: pytest.MonkeyPatch):
    (tmp_path / "kernel.c").write_text(SOURCE, encoding="utf-8")
    compiled(tmp_path / "kernel.c", tmp_path / "kernel.so")

    def named(symbol: str) -> Path:
        (tmp_path / "audit.toml").write_text(ASKED.format(table=LIBRARY.format(symbol=symbol)), encoding="utf-8")
        return tmp_path

    return named


def test_a_sound_library(library, capsys: pytest.CaptureFixture[str]) -> None:
    """The negative control: nothing is wrong, and three blocks are kept."""
    folder = library("sound")
    assert main(["audit", str(folder / "audit.toml"), "--out", str(folder / "out"), "--quiet"]) == 0
    assert capsys.readouterr().err == ""
    assert kept(folder) == {(0, 0), (1, 0), (2, 0)}


CASES = [
    (
        "half",
        "{folder}/audit.toml: library.symbol: {folder}/kernel.so has no function half_float32; looked for "
        "half_float64, half_float32; accepted: a library with a function for each format of [formats] and for "
        "float64, the reference",
    ),
    ("code", "level 1, arm float32: {folder}/kernel.so: code_float32 returned -5; accepted: 0, for success"),
    (
        "nan",
        "level 1, arm float64: kernel.so:nan gives NaN in the reference for 'x': 1 of 1024 paths, the first is path 3; "
        "an output that is not written looks the same",
    ),
    (
        "crash",
        "the trial run: the process that ran the kernel was ended by SIGSEGV at crash_float32 of {folder}/kernel.so, "
        "twice",
    ),
    ("leave", "the trial run: the process that ran the kernel ended with exit code 0, twice"),
]


@pytest.mark.parametrize(("symbol", "message"), CASES, ids=[symbol for symbol, _ in CASES])
def test_a_library_in_trouble(library, capsys: pytest.CaptureFixture[str], symbol: str, message: str) -> None:
    """Found in the trial, before anything is measured."""
    folder = library(symbol)
    text = (folder / "audit.toml").read_text(encoding="utf-8").replace("finest = 2", "finest = 1")
    (folder / "audit.toml").write_text(text, encoding="utf-8")
    assert refused(folder, capsys) == message.format(folder=folder)


def test_a_dry_run_is_made_in_a_worker_too(library, capsys: pytest.CaptureFixture[str]) -> None:
    """A library that leaves on level 2 takes a worker with it, and not this process."""
    folder = library("leave")
    text = (folder / "audit.toml").read_text(encoding="utf-8").replace("finest = 2", "finest = 1")
    (folder / "audit.toml").write_text(text, encoding="utf-8")
    assert refused(folder, capsys, "--dry") == CASES[-1][1]


def test_a_crash_in_the_measurement_keeps_what_is_finished(library, capsys: pytest.CaptureFixture[str]) -> None:
    """On a level that the trial does not try: level, block, symbol and library; the block before it is kept."""
    folder = library("crash")
    assert refused(folder, capsys) == (
        "level 1: block 0: the process that ran the kernel was ended by SIGSEGV at crash_float32 of "
        f"{folder / 'kernel.so'}, twice"
    )
    assert kept(folder) == {(2, 0)}


SCRIPT = f"""#!{sys.executable}
import json, os, sys
import numpy as np
request = json.load(open(os.path.join(sys.argv[-1], "request.json")))
draws = np.load(os.path.join(sys.argv[-1], "draws.npy"))
if request["steps"] == 2 and os.path.exists("broken"):
    print("the licence has run out", file=sys.stderr)
    sys.exit(4)
np.save(os.path.join(sys.argv[-1], "result.npy"), draws.sum(axis=0, dtype=draws.dtype)[None])
"""


def test_a_command_that_fails_on_the_way_and_goes_on_later(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Exit code and last words with level and arm; what was finished is kept, --resume ends with the same bytes."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "audit.toml").write_text(ASKED.format(table=COMMAND), encoding="utf-8")
    (tmp_path / "kernel").write_text(SCRIPT, encoding="utf-8")
    (tmp_path / "kernel").chmod(0o755)
    assert main(["audit", "audit.toml", "--out", "whole", "--quiet"]) == 0
    capsys.readouterr()
    (tmp_path / "broken").touch()
    assert refused(tmp_path, capsys) == (
        "level 1, arm float64: ./kernel ended with exit code 4. It said last: the licence has run out"
    )
    assert kept(tmp_path) == {(2, 0)}
    (tmp_path / "broken").unlink()
    assert main(["audit", "audit.toml", "--out", "out", "--quiet", "--resume"]) == 0
    assert (tmp_path / "out" / "levels.csv").read_bytes() == (tmp_path / "whole" / "levels.csv").read_bytes()


def test_a_missing_library_is_said_before_the_folder_is_made(tmp_path: Path) -> None:
    """As a program of its own, too."""
    (tmp_path / "audit.toml").write_text(ASKED.format(table=LIBRARY.format(symbol="x")), encoding="utf-8")
    done = run("audit", "audit.toml", folder=tmp_path)
    assert done.returncode == 2
    assert done.stderr == (
        f"narrowgauge: audit.toml: library.path: no such file: {tmp_path / 'kernel.so'}; "
        "accepted: a shared library, relative to the audit file\n"
    )
    assert not (tmp_path / "audits").exists()
