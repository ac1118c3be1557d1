"""The command when kernels do what they like to exceptions, streams and threads: exit codes and last words."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest
from test_cli import AUDIT, COMMAND, ENVIRONMENT, run

from narrowgauge import api
from narrowgauge.cli import main

KERNEL = """
import os
import sys
import threading
import time

import numpy as np


class Mute(Exception):
    def __str__(self):
        raise self


class Odd(BaseException):
    def __str__(self):
        return 3

    __repr__ = __str__


def growth(dW, h):
    x = np.full(dW.shape[1], 1.0)
    for n in range(dW.shape[0]):
        x = x + 0.05 * h * x + 0.2 * x * dW[n]
    return x


def mute(dW, h):
    raise Mute


def odd(dW, h):
    raise Odd


def leaves_mute(dW, h):
    raise SystemExit(Mute())


def closes(dW, h):
    sys.stdout.close()
    return growth(dW, h)


def takes_away(dW, h):
    sys.stdout = None
    return growth(dW, h)


def closes_both(dW, h):
    sys.stderr.close()
    return closes(dW, h)


def elsewhere(dW, h):
    os.chdir(os.path.dirname(os.path.abspath(os.sep)))
    return growth(dW, h)


def leaves_a_thread(dW, h):
    threading.Thread(target=time.sleep, args=(600,)).start()
    return growth(dW, h)
"""


def written(folder: Path, function: str) -> Path:
    (folder / "kernel.py").write_text(KERNEL, encoding="utf-8")
    path = folder / f"{function}.toml"
    path.write_text(AUDIT.format(function=function, seed=1), encoding="utf-8")
    return path


@pytest.mark.parametrize("options", [[], ["--workers", "2"]])
@pytest.mark.parametrize(("function", "kind"), [("mute", "Mute"), ("odd", "Odd"), ("leaves_mute", "SystemExit")])
def test_an_exception_without_a_text_is_the_kernels(
    tmp_path: Path, function: str, kind: str, options: list[str]
) -> None:
    """One line and exit code 2, never 1, whoever ran it."""
    done = run("audit", written(tmp_path, function), "--quiet", *options, folder=tmp_path)
    assert (done.returncode, done.stdout) == (2, "")
    words = f"narrowgauge: level 2, arm plain NumPy: the kernel raised {kind}: (its text cannot be made)"
    assert done.stderr.splitlines()[-1] == words


class MuteError(Exception):
    """Has no text."""

    def __str__(self) -> str:
        raise self


def test_a_fault_without_a_text_is_told(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """What no kernel raised is a fault of the program, with exit code 70 also where it has no text."""

    def broken(*_: object, **__: object) -> None:
        raise MuteError

    monkeypatch.setattr(api, "run_audit", broken)
    assert main(["audit", str(written(tmp_path, "growth")), "--quiet"]) == 70
    assert "internal error: MuteError: (its text cannot be made). This is a fault" in capsys.readouterr().err


@pytest.mark.parametrize("function", ["closes", "takes_away"])
def test_a_kernel_that_closes_standard_output(tmp_path: Path, function: str) -> None:
    """What was measured is written, and that it cannot be shown is an error of the output; a worker has its own."""
    path = written(tmp_path, function)
    done = run("audit", path, "--quiet", folder=tmp_path)
    assert (done.returncode, done.stdout) == (2, "")
    assert done.stderr == "narrowgauge: standard output cannot be written: it is closed\n"
    assert (tmp_path / "audits" / function / "audit.json").exists()
    done = run("audit", path, "--quiet", "--resume", "--workers", "2", folder=tmp_path)
    assert (done.returncode, done.stderr) == (0, "")


def test_a_kernel_that_closes_everything(tmp_path: Path) -> None:
    """Nothing can be said, and the exit code still says it."""
    done = run("audit", written(tmp_path, "closes_both"), "--quiet", folder=tmp_path)
    assert (done.returncode, done.stdout, done.stderr) == (2, "", "")


def test_a_kernel_that_goes_elsewhere(tmp_path: Path) -> None:
    """A folder that was given relative to where the command began stays the same, and is called by the same name."""
    path = written(tmp_path, "elsewhere")
    done = run("audit", path, "--out", "results", folder=tmp_path)
    assert done.returncode == 0
    assert {one.name for one in (tmp_path / "results").iterdir()} == {
        "audit.json",
        "levels.csv",
        "blocks.sqlite",
        "report.html",
    }
    assert str(tmp_path / "results") not in done.stdout
    assert "results" in done.stdout


def test_a_thread_that_a_kernel_left_is_not_waited_for(tmp_path: Path) -> None:
    """All is written and shown, and the command ends."""
    done = run("audit", written(tmp_path, "leaves_a_thread"), "--quiet", folder=tmp_path)
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout.endswith("\n")


def test_resuming_nothing_is_said(tmp_path: Path) -> None:
    """Also with --quiet: who asks to go on and would begin anew may have named another folder."""
    done = run("audit", written(tmp_path, "growth"), "--quiet", "--resume", "--out", "results", folder=tmp_path)
    assert done.returncode == 0
    assert done.stderr == "narrowgauge: results: holds no finished blocks to go on with; the audit begins anew\n"
    done = run("audit", tmp_path / "growth.toml", "--quiet", "--resume", "--out", "results", folder=tmp_path)
    assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.skipif(sys.platform == "win32", reason="a shell of another kind is there")
def test_a_command_without_standard_output(tmp_path: Path) -> None:
    """Closed by the shell before it began: an error of the output, and no other."""
    written(tmp_path, "growth")
    command = ["sh", "-c", 'exec "$@" >&-', "sh", *COMMAND, "draft", f"{tmp_path}/kernel.py:growth"]
    done = subprocess.run(command, env=ENVIRONMENT, capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (2, "narrowgauge: standard output cannot be written: it is closed\n")
