"""A kernel in a command: its request, its result, and what is said when it fails."""

from __future__ import annotations

import json
import os
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.errors import AuditFileError, KernelError
from narrowgauge.kernel import command as command_module
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.kernel.owntables import OWN_FORMATS

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="scripts are started otherwise there")

# Keeps the request beside itself, then does as its first argument says.
SCRIPT = f"""#!{sys.executable}
import json, os, shutil, subprocess, sys, time
import numpy as np
how, folder = sys.argv[1], sys.argv[-1]
request = json.load(open(os.path.join(folder, "request.json")))
draws = np.load(os.path.join(folder, "draws.npy"))
json.dump([request, str(draws.dtype), draws.shape, os.getcwd(), folder], open("seen.json", "w"))
result = np.array([draws[1, 1], draws[0, 1]])
if how == "fail":
    print("first", file=sys.stderr)
    print("no licence  ", file=sys.stderr)
    print(file=sys.stderr)
    sys.exit(3)
if how == "crash":
    os.abort()
if how == "hang":
    child = subprocess.Popen(["sleep", "600"])
    open("child", "w").write(str(child.pid))
    child.wait()
if how == "full":
    open("/dev/full", "w").write("x" * 100000)
if how == "nothing":
    sys.exit(0)
if how == "shape":
    result = result.T
if how == "integers":
    result = result.astype(np.int64)
if how == "wider":
    result = result.astype(np.float64)
if how == "noise":
    open(os.path.join(folder, "result.npy"), "w").write("nothing of the kind")
    sys.exit(0)
if how == "litter":
    os.makedirs(os.path.join(folder, "a", "b"))
np.save(os.path.join(folder, "result.npy"), result)
"""


def command_for(folder, how, monkeypatch, **table):
    path = folder / "kernel"
    path.write_text(SCRIPT, encoding="utf-8")
    path.chmod(0o755)
    monkeypatch.chdir(folder)
    monkeypatch.setenv("TMPDIR", str(folder / "scratch"))
    monkeypatch.setattr("tempfile.tempdir", None)
    (folder / "scratch").mkdir(exist_ok=True)
    mapping = {
        "kernel": {"takes": "normals", "factors": 2},
        "command": {"run": ["./kernel", how], "outputs": ["a", "b"], **table},
        "parameters": {"rate": 0.5, "name": "call", "grid": [[1, 2], [3, 4]]},
        "ladder": {"horizon": 1.0, "finest": 2},
    }
    return find_kernel(audit_file_from(mapping)).foreign


def called(command, name="float32", paths=12):
    form = FORMATS[name]
    draws = np.arange(3 * 2 * paths).reshape(3, 2, paths).astype(form.storage)
    parameters = {"rate": 0.5, "name": "call", "grid": np.array([[1, 2], [3, 4]])}
    return draws, command.function(form)(draws, 0.25, **parameters)


@pytest.mark.parametrize("name", OWN_FORMATS)
def test_draws_and_results_keep_their_bits(tmp_path, monkeypatch, name):
    """In every format what the command returns of its draws comes back as it was; the folder is gone then."""
    draws, found = called(command_for(tmp_path, "work", monkeypatch), name)
    assert list(found) == ["a", "b"]
    assert found["a"].dtype == FORMATS[name].storage
    assert found["a"].tobytes() == draws[1, 1].tobytes()
    assert found["b"].tobytes() == draws[0, 1].tobytes()
    assert list((tmp_path / "scratch").iterdir()) == []


def test_the_request_says_everything(tmp_path, monkeypatch):
    """Format, sizes, step size, parameters and outputs; bfloat16 as uint16; run in the audit file's folder."""
    called(command_for(tmp_path, "work", monkeypatch), "bfloat16")
    request, dtype, shape, where, folder = json.loads((tmp_path / "seen.json").read_text())
    assert request == {
        "format": "bfloat16",
        "steps": 3,
        "factors": 2,
        "paths": 12,
        "h": 0.25,
        "layout": "steps, factors, paths",
        "parameters": {"rate": 0.5, "name": "call", "grid": [[1, 2], [3, 4]]},
        "outputs": ["a", "b"],
    }
    assert (dtype, shape) == ("uint16", [3, 2, 12])
    assert where == str(tmp_path)
    assert Path(folder).parent == tmp_path / "scratch"


def test_a_wider_result_is_taken_as_it_is(tmp_path, monkeypatch):
    """A command may leave float64 whatever its format."""
    assert called(command_for(tmp_path, "wider", monkeypatch))[1]["a"].dtype == np.float64


WANTED = "accepted: an array of shape (2, 12), (outputs, paths), of float32 or a wider type"


@pytest.mark.parametrize(
    ("how", "message"),
    [
        ("fail", "./kernel fail ended with exit code 3. It said last: no licence"),
        ("crash", "./kernel crash was ended by SIGABRT"),
        ("full", "./kernel full ended with exit code 1. It said last: OSError: [Errno 28] No space left on device"),
        ("nothing", f"./kernel nothing left no result.npy; {WANTED}"),
        ("shape", f"./kernel shape left a result.npy of shape (12, 2); {WANTED}"),
        ("integers", f"./kernel integers left a result.npy of int64; {WANTED}"),
    ],
)
def test_a_command_that_fails(tmp_path, monkeypatch, how, message):
    """Exit code or signal with its last words, or what is wrong with the result; the folder is gone all the same."""
    with pytest.raises(KernelError) as caught:
        called(command_for(tmp_path, how, monkeypatch))
    assert str(caught.value) == message
    assert list((tmp_path / "scratch").iterdir()) == []


def test_a_result_that_is_no_array(tmp_path, monkeypatch):
    """Is named as such, in NumPy's words."""
    with pytest.raises(KernelError, match=r"^\./kernel noise left a result\.npy that cannot be read \(.+\); accepted"):
        called(command_for(tmp_path, "noise", monkeypatch))


def test_folders_in_the_folder_go_too(tmp_path, monkeypatch):
    """Whatever the command makes there."""
    called(command_for(tmp_path, "litter", monkeypatch))
    assert list((tmp_path / "scratch").iterdir()) == []


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="only Linux lists what a process started")
def test_a_command_past_its_limit_ends_with_all_that_it_started(tmp_path, monkeypatch):
    """The message names the limit and its key; neither the process, nor its child, nor the folder is left."""
    with pytest.raises(KernelError) as caught:
        called(command_for(tmp_path, "hang", monkeypatch, seconds=5.0))
    assert str(caught.value) == "./kernel hang was still at it after 5 s, command.seconds, and was stopped"
    child = int((tmp_path / "child").read_text())
    until = time.monotonic() + 10
    while _running(child) and time.monotonic() < until:
        time.sleep(0.05)
    assert not _running(child)
    assert list((tmp_path / "scratch").iterdir()) == []


def _running(number):
    """Whether a process is there and has not ended; nobody may have waited for it."""
    try:
        return Path(f"/proc/{number}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except (FileNotFoundError, ProcessLookupError):
        return False


def test_a_disk_without_room_for_the_request(tmp_path, monkeypatch):
    """The message names the folder and the system's reason."""
    command = command_for(tmp_path, "work", monkeypatch)

    def full(*_, **__):
        raise OSError(28, os.strerror(28))

    monkeypatch.setattr(np, "save", full)
    with pytest.raises(KernelError, match=r"narrowgauge-.+: the request cannot be written: No space left on device$"):
        called(command)
    assert list((tmp_path / "scratch").iterdir()) == []


def test_what_runs_is_abandoned_with_its_folder(tmp_path, monkeypatch):
    """A process that is about to leave at once ends its command and removes the folder first."""
    command = command_for(tmp_path, "hang", monkeypatch)
    wait = command_module.subprocess.Popen.wait
    counted = []

    def leaving(self, timeout=None):
        if not counted:
            counted.append(self.pid)
            until = time.monotonic() + 30
            while not (tmp_path / "child").exists() and time.monotonic() < until:
                time.sleep(0.05)
            command_module.abandon()
        return wait(self, timeout)

    monkeypatch.setattr(command_module.subprocess.Popen, "wait", leaving)
    with pytest.raises(KernelError, match="was ended by SIGKILL"):
        called(command)
    assert list((tmp_path / "scratch").iterdir()) == []


@pytest.mark.parametrize(("run", "shown"), [("./kernal", "{folder}/kernal"), ("no-such-program", "no-such-program")])
def test_a_program_that_is_not_there(tmp_path, monkeypatch, run, shown):
    """Is refused before anything runs, by the path that was looked at, or by its name."""
    with pytest.raises(AuditFileError) as caught:
        command_for(tmp_path, "work", monkeypatch, run=[run])
    assert str(caught.value) == (
        f"audit: command.run: no program {shown.format(folder=tmp_path)}; "
        "accepted: a program that may be executed, and its arguments"
    )


def test_a_program_that_may_not_be_executed(tmp_path, monkeypatch):
    """A script without the right to run is there, and that is what is said."""
    (tmp_path / "plain").write_text("#!/bin/sh\n", encoding="utf-8")
    with pytest.raises(AuditFileError, match=r"plain may not be executed; accepted: a program that may be executed"):
        command_for(tmp_path, "work", monkeypatch, run=["./plain"])


def test_the_fingerprint_covers_the_files_beside_the_audit_file(tmp_path, monkeypatch):
    """Another script or argument is another kernel; a program of the system counts by its name."""
    first = command_for(tmp_path, "work", monkeypatch).digest()
    assert command_for(tmp_path, "work", monkeypatch).digest() == first
    assert command_for(tmp_path, "wider", monkeypatch).digest() != first
    changed = command_for(tmp_path, "work", monkeypatch)
    (tmp_path / "kernel").write_text(SCRIPT + "\n", encoding="utf-8")
    assert changed.digest() != first
    by_name = command_for(tmp_path, "work", monkeypatch, run=["env", "python3"])
    assert by_name.digest().startswith("sha256:")
