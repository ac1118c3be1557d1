"""The command line's options about workers and resuming, and the exit codes of audits in trouble."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from test_cli import AUDIT, COMMAND, ENVIRONMENT, run

from narrowgauge import api
from narrowgauge.cli import main
from narrowgauge.errors import NarrowgaugeError
from narrowgauge.measure.workers import Workers

KERNEL = """
import ctypes
import os
import sys
import time
from pathlib import Path

import numpy as np


def growth(dW, h):
    x = np.full(dW.shape[1], 1.0)
    for n in range(dW.shape[0]):
        x = x + 0.05 * h * x + 0.2 * x * dW[n]
    return x


def exits(dW, h):
    sys.exit(0)


def crashes(dW, h):
    ctypes.string_at(0)


def waits(dW, h):
    if dW.shape[0] == 1 and Path("wait").exists():
        Path("waiting").touch()
        time.sleep(600)
    return growth(dW, h)
"""
needs_signals = pytest.mark.skipif(sys.platform == "win32", reason="processes end otherwise there")


def written(folder: Path, function: str) -> Path:
    (folder / "kernel.py").write_text(KERNEL, encoding="utf-8")
    path = folder / f"{function}.toml"
    asked = AUDIT.format(function=function, seed=1).replace("[ladder]", 'coupling = "none"\n[ladder]')
    path.write_text(asked, encoding="utf-8")
    return path


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (["--workers", "0"], "argument --workers: '0' is not accepted; accepted: a whole number of 1 or more"),
        (["--workers", "two"], "argument --workers: 'two' is not accepted; accepted: a whole number of 1 or more"),
        (["--workers", "-1"], "argument --workers: '-1' is not accepted; accepted: a whole number of 1 or more"),
        (["--timeout", "0"], "argument --timeout: '0' is not accepted; accepted: seconds, above 0 and at most 1e+06"),
        (
            ["--timeout", "nan"],
            "argument --timeout: 'nan' is not accepted; accepted: seconds, above 0 and at most 1e+06",
        ),
        (["--resume", "--replace"], "argument --replace: not allowed with argument --resume"),
        (["--workers", "2", "--cluster", "tcp://a:1"], "argument --cluster: not allowed with argument --workers"),
    ],
)
def test_options_that_make_no_sense(options: list[str], message: str, capsys: pytest.CaptureFixture[str]) -> None:
    """One line and exit code 2."""
    assert main(["audit", "a.toml", *options]) == 2
    shown = capsys.readouterr()
    assert shown.out == ""
    assert shown.err == f"narrowgauge: {message}; narrowgauge audit --help shows what is accepted\n"


def test_no_time_limit_on_a_cluster(capsys: pytest.CaptureFixture[str]) -> None:
    """A worker that is not ours cannot be stopped."""
    assert main(["audit", "a.toml", "--cluster", "tcp://a:1", "--timeout", "5"]) == 2
    assert capsys.readouterr().err == (
        "narrowgauge: --timeout cannot be held on a cluster, whose workers are not this program's to replace; "
        "accepted: one of the two\n"
    )


def test_options_reach_the_audit(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Each by its name; without them there is one process, and nothing is resumed."""
    asked = []

    def noted(_file: object, _out: Path, **options: object) -> None:
        asked.append((options["workers"], options["resume"], options["replace"]))
        raise NarrowgaugeError("")

    monkeypatch.setattr(api, "run_audit", noted)
    path = str(written(tmp_path, "growth"))
    main(["audit", path, "--quiet"])
    main(["audit", path, "--quiet", "--workers", "3", "--timeout", "1.5", "--resume"])
    main(["audit", path, "--quiet", "--cluster", "tcp://a:1", "--replace"])
    assert asked == [
        (Workers(), False, False),
        (Workers(number=3, timeout=1.5), True, False),
        (Workers(cluster="tcp://a:1"), False, True),
    ]


def test_a_kernel_that_exits_with_success_is_an_error(tmp_path: Path) -> None:
    """sys.exit(0) never makes the program's exit code, neither in this process nor in a worker."""
    words = "narrowgauge: level 2, arm plain NumPy: the kernel raised SystemExit: 0\n"
    shown = []
    for options in ([], ["--workers", "2"]):
        done = run("audit", written(tmp_path, "exits"), "--quiet", *options, folder=tmp_path)
        assert (done.returncode, done.stdout) == (2, "")
        assert done.stderr.endswith(words)
        shown.append(done.stderr)
    assert shown[0] == shown[1]  # with the same lines of the user's


@needs_signals
def test_a_kernel_that_crashes_is_an_error(tmp_path: Path) -> None:
    """In a worker a segmentation fault is one line and exit code 2."""
    done = run("audit", written(tmp_path, "crashes"), "--quiet", "--workers", "1", "--timeout", "600", folder=tmp_path)
    assert (done.returncode, done.stdout) == (2, "")
    start = "narrowgauge: the trial run: the process that ran the kernel was ended by SIGSEGV at "
    assert done.stderr.startswith(start)
    assert done.stderr.endswith(", twice\n")
    assert f"{tmp_path}/kernel.py:" in done.stderr
    assert done.stderr.count("\n") == 1


@needs_signals
@pytest.mark.parametrize("workers", ["1", "2"])
def test_an_interrupted_audit_goes_on(tmp_path: Path, workers: str) -> None:
    """Ctrl-C, which a terminal sends to the whole group, ends all with one line; --resume has what was finished."""
    command = [*COMMAND, "audit", str(written(tmp_path, "waits")), "--quiet", "--workers", workers, "--timeout", "600"]
    if workers == "1":
        command = command[:-4]
    (tmp_path / "wait").touch()
    # The identity run comes first and would wait, too. One process begins with level 0, workers end with it.
    waits = "dW.shape == (2, 2048)" if workers == "1" else "dW.shape == (1, 2048)"
    (tmp_path / "kernel.py").write_text(KERNEL.replace("dW.shape[0] == 1", waits))
    path = tmp_path / "waits.toml"
    path.write_text(path.read_text().replace("block = 1024", "block = 2048"))
    process = subprocess.Popen(
        command, cwd=tmp_path, env=ENVIRONMENT, stderr=subprocess.PIPE, text=True, start_new_session=True
    )
    until = time.monotonic() + 300
    while not (tmp_path / "waiting").exists() and time.monotonic() < until:
        time.sleep(0.05)
    os.killpg(process.pid, signal.SIGINT)
    _, shown = process.communicate(timeout=300)
    assert (process.returncode, shown) == (130, "narrowgauge: interrupted\n")
    (tmp_path / "wait").unlink()
    done = run("audit", path, "--quiet", "--resume", folder=tmp_path)
    assert done.returncode == 0
    if workers == "1":  # of several, another may still have been at the first block
        assert done.stderr == ""
