"""Audits that are stopped, by whatever: they go on where they stopped and end with the same bytes."""

from __future__ import annotations

import random
import signal
import sqlite3
import subprocess
import sys
import time
from contextlib import closing
from pathlib import Path

import msgspec
import pytest
from audit_cases import GEOMETRIC, file_for

from narrowgauge import api
from narrowgauge.api import audit, run_audit
from narrowgauge.errors import AuditFolderError, KernelError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure import store
from narrowgauge.measure.packing import unpacked
from narrowgauge.measure.store import LEDGER, Ledger
from narrowgauge.measure.workers import Workers
from narrowgauge.record.canonical import canonical_text

LEVELS, BLOCKS = 3, 48
SLOW = GEOMETRIC.replace("import numpy as np", "import time\nimport numpy as np").replace(
    "    return x", "    time.sleep(0.003)\n    return x"
)
# Says how many blocks are there from before, then a dot for each that is added; commits often, to be caught at it. Four
# blocks after the last dot that is waited for it stands still, so that it cannot be done before it is killed.
DRIVER = """
import sys
import time
from pathlib import Path
from narrowgauge.api import run_audit
from narrowgauge.kernel.auditfile import read_audit_file
from narrowgauge.measure import store
from narrowgauge.measure.workers import Workers

store._TOGETHER = 0.02

class Watcher:
    def planned(self, plan):
        self.left = plan.kept + int(sys.argv[4]) + 4
        print(plan.kept, flush=True)
    def look(self, *_):
        pass
    def advanced(self, steps):
        print(".", flush=True)
        self.left -= 1
        if self.left == 0:
            time.sleep(600)

file, workers = read_audit_file(Path(sys.argv[1])), Workers(number=int(sys.argv[3]))
run_audit(file, Path(sys.argv[2]), resume=True, workers=workers, watcher=Watcher())
"""
needs_signals = pytest.mark.skipif(sys.platform == "win32", reason="signals are sent otherwise there")


def slow_file(folder: Path) -> AuditFile:
    """One look of 3 levels of 48 blocks."""
    paths = str(1024 * BLOCKS)
    return file_for(folder, SLOW, sampling={"paths": paths, "most_paths": paths})


def outcome(folder: Path) -> tuple[bytes, bytes]:
    """What an audit wrote, without the one part that may differ between two runs."""
    record = msgspec.json.decode((folder / "audit.json").read_bytes())
    del record["provenance"]
    return canonical_text(record).encode(), (folder / "levels.csv").read_bytes()


def killed(file: AuditFile, out: Path, workers: int, more: int, delay: float) -> int:
    """Run an audit and kill it when so many blocks more are done, and a little later; how many it had from before."""
    command = [sys.executable, "-c", DRIVER, file.source, str(out), str(workers), str(more)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as driver:
        assert driver.stdout is not None
        kept = int(driver.stdout.readline() or 0)
        for _ in range(kept + more):
            driver.stdout.readline()
        time.sleep(delay)
        driver.kill()
    assert driver.returncode == -signal.SIGKILL, "it was done before it could be killed"
    return kept


@needs_signals
def test_an_audit_that_is_killed_ten_times_ends_with_the_same_bytes(tmp_path: Path) -> None:
    """At moments of a fixed seed, in one process and in two by turns: what was finished is never run again, or lost.

    The moments are up to four blocks and 40 ms after the start of the measurement.
    """
    file, chance = slow_file(tmp_path), random.Random(20260801)
    out = tmp_path / "out"
    kept = [killed(file, out, 1 + n % 2, chance.randrange(5), chance.uniform(0.0, 0.04)) for n in range(10)]
    assert kept == sorted(kept)
    assert kept[0] == 0
    assert 0 < kept[-1] < LEVELS * BLOCKS
    assert not (out / "audit.json").exists()
    result = run_audit(file, out, resume=True)
    resumed = result.record.provenance["resumed_blocks"]
    assert isinstance(resumed, int)
    assert kept[-1] <= resumed < LEVELS * BLOCKS
    run_audit(file, tmp_path / "undisturbed")
    assert outcome(out) == outcome(tmp_path / "undisturbed")


def failing(folder: Path, flag: Path) -> AuditFile:
    """A kernel that raises on level 0, in blocks of 2,048 paths, while there is a file; levels are not coupled."""
    trouble = f"    import os\n    if dW.shape == (1, 2048) and os.path.exists({str(flag)!r}):\n        1 / 0\n"
    source = GEOMETRIC.replace("    x = np.ones", f"{trouble}    x = np.ones")
    sampling = {"block": "2048", "paths": "4096", "most_paths": "4096"}
    return file_for(folder, source, kernel={"coupling": '"none"'}, sampling=sampling)


@pytest.fixture
def stopped(tmp_path: Path) -> tuple[AuditFile, Path]:
    """An audit that failed on level 0 when 4 blocks of levels 1 and 2 were done, and would not fail again."""
    flag = tmp_path / "flag"
    flag.touch()
    file = failing(tmp_path, flag)
    with pytest.raises(KernelError, match="the kernel raised ZeroDivisionError"):
        run_audit(file, tmp_path / "out", workers=Workers(timeout=600.0))
    flag.unlink()
    return file, tmp_path / "out"


def test_what_was_finished_before_a_failure_stays(tmp_path: Path, stopped: tuple[AuditFile, Path]) -> None:
    """The blocks of other levels are there to go on with, and the end is that of an audit that did not fail."""
    file, out = stopped
    assert [path.name for path in out.iterdir()] == [LEDGER]
    result = run_audit(file, out, resume=True)
    assert result.record.provenance["resumed_blocks"] == 4
    run_audit(file, tmp_path / "undisturbed")
    assert outcome(out) == outcome(tmp_path / "undisturbed")


def test_what_is_unfinished_is_neither_lost_nor_taken_by_chance(stopped: tuple[AuditFile, Path]) -> None:
    """Without --resume the audit is refused in words that say what to do; with --replace it begins anew."""
    file, out = stopped
    with pytest.raises(AuditFolderError) as caught:
        run_audit(file, out)
    assert str(caught.value) == (
        f"{out}: holds this audit, unfinished (4 blocks are done); accepted: --resume to go on with it, --replace to "
        "begin anew, or --out with another folder"
    )
    assert run_audit(file, out, replace=True).record.provenance["resumed_blocks"] == 0


def test_a_flipped_bit_is_not_gone_on_with(tmp_path: Path, stopped: tuple[AuditFile, Path]) -> None:
    """A block that is not as it was written is run again and told, and the end is that of an undisturbed audit."""
    file, out = stopped
    with closing(sqlite3.connect(out / LEDGER)) as ledger:
        (data,) = ledger.execute("SELECT tally FROM blocks WHERE level = 2 AND block = 1").fetchone()
        mean = unpacked(data).quantities["value"].values["float64"].moments.mean.astype("<f8").tobytes()
        flipped = bytearray(data)
        flipped[data.index(mean) + 6] ^= 8  # a mean that is as good as any other
        ledger.execute("UPDATE blocks SET tally = ? WHERE level = 2 AND block = 1", (bytes(flipped),))
        ledger.commit()
    told: list[str] = []
    made = run_audit(file, out, resume=True, tell=told.append).record.provenance
    assert told == [f"{out}: 1 block is damaged and run again"]
    assert (made["resumed_blocks"], made["damaged_blocks"]) == (3, 1)
    run_audit(file, tmp_path / "undisturbed")
    assert outcome(out) == outcome(tmp_path / "undisturbed")


@pytest.mark.parametrize("what", ["kernel", "audit file", "version"])
def test_a_change_is_not_resumed(
    tmp_path: Path, stopped: tuple[AuditFile, Path], what: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A kernel, audit file or version that changed is named, and nothing is run or thrown away."""
    file, out = stopped
    before = (out / LEDGER).read_bytes()
    if what == "kernel":
        reason = "the kernel has changed"
        (tmp_path / "kernel.py").write_text((tmp_path / "kernel.py").read_text() + "\n# another state\n")
    elif what == "audit file":
        reason = "the audit file has changed (ladder.horizon)"
        file = msgspec.structs.replace(file, ladder=msgspec.structs.replace(file.ladder, horizon=2.0))
    else:
        known = store.versions()
        reason = f"python is 3.99.0 and was {known['python']}"
        monkeypatch.setattr(store, "versions", lambda: {**known, "python": "3.99.0"})
    with pytest.raises(AuditFolderError) as caught:
        run_audit(file, out, resume=True)
    assert str(caught.value) == (
        f"{out}: the audit in this folder cannot be resumed: {reason}; accepted: kernel, audit file and versions as "
        "they were when it began, --out with another folder, or --replace"
    )
    assert (out / LEDGER).read_bytes() == before


def test_resuming_nothing_begins_and_resuming_the_end_runs_nothing(tmp_path: Path) -> None:
    """From Python, too; and a finished audit keeps its blocks, all of which serve again."""
    file_for(tmp_path, GEOMETRIC)
    first = audit(tmp_path / "audit.toml", out=tmp_path / "out", resume=True, quiet=True)
    before = outcome(tmp_path / "out")
    again = audit(tmp_path / "audit.toml", out=tmp_path / "out", resume=True, quiet=True)
    assert first.record.provenance["resumed_blocks"] == 0
    assert again.record.provenance["resumed_blocks"] == first.record.quantities["value"].levels[0].blocks * 3
    assert outcome(tmp_path / "out") == before


def test_an_audit_that_replaced_another_is_resumed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The record that the other one left does not stand in its way; nor does a full disk at the very end."""
    out = tmp_path / "out"
    run_audit(file_for(tmp_path, GEOMETRIC, sampling={"seed": "2"}), out)
    file = file_for(tmp_path, GEOMETRIC)

    def full(path: Path, text: str) -> None:
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr(api, "write_atomically", full)
        with pytest.raises(AuditFolderError, match="cannot be written: No space left on device"):
            run_audit(file, out, replace=True)
    assert run_audit(file, out, resume=True).record.provenance["resumed_blocks"] != 0
    run_audit(file, tmp_path / "undisturbed")
    assert outcome(out) == outcome(tmp_path / "undisturbed")


def test_a_refused_audit_leaves_the_blocks_of_another_alone(tmp_path: Path) -> None:
    """A folder that holds another, finished audit keeps its ledger, too."""
    out = tmp_path / "out"
    run_audit(file_for(tmp_path, GEOMETRIC), out)
    before = (out / LEDGER).read_bytes()
    with pytest.raises(AuditFolderError, match="holds another audit"):
        run_audit(file_for(tmp_path, GEOMETRIC, sampling={"seed": "2"}), out)
    assert (out / LEDGER).read_bytes() == before


def test_two_audits_do_not_share_a_folder(tmp_path: Path) -> None:
    """The second one is refused while the first one runs, whatever it asks for."""
    out = tmp_path / "out"
    out.mkdir()
    with Ledger(out):
        for options in ({}, {"resume": True}, {"replace": True}):
            with pytest.raises(AuditFolderError) as caught:
                run_audit(file_for(tmp_path, GEOMETRIC), out, **options)
            expected = "another audit is running in this folder; accepted: --out with another folder, or wait"
            assert str(caught.value) == f"{out}: {expected}"


def test_a_plan_counts_what_is_there(tmp_path: Path) -> None:
    """Blocks from before are told, and their time is left out of the estimate."""
    plans = []

    class Watcher:
        """Keeps the plan."""

        def planned(self, plan: object) -> None:
            plans.append(plan)

        def look(self, *_: object) -> None: ...

        def advanced(self, steps: int) -> None: ...

    for _ in range(2):
        run_audit(file_for(tmp_path, GEOMETRIC), tmp_path / "out", resume=True, watcher=Watcher())
    assert [plan.kept for plan in plans] == [0, 3]
    assert [plan.seconds > 0.0 for plan in plans] == [True, False]
    assert plans[0].path_steps == plans[1].path_steps
