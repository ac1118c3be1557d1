"""The ledger: what it keeps, whom it lets in, and what it says when it cannot write."""

from __future__ import annotations

import resource
import sqlite3
import subprocess
import sys
from contextlib import closing
from dataclasses import replace
from pathlib import Path

import pytest

from narrowgauge.errors import AuditFolderError
from narrowgauge.measure import store
from narrowgauge.measure.moments import Moments, Series
from narrowgauge.measure.packing import packed
from narrowgauge.measure.store import LEDGER, Identity, Ledger
from narrowgauge.measure.tally import LevelTally
from narrowgauge.measure.task import Block

OTHERWISE = "accepted: --out with another folder, or --replace"
MINE = Identity(run="k.py:f", fingerprint="sha256:1", asked='{"a": {"b": 1, "c": 2}}', versions={"numpy": "2.4"})
EMPTY = LevelTally(level=2, paths=1024, dropped=0, blocks=1, quantities={}, raised={})


def block(number: int, seconds: float = 0.0) -> Block:
    return Block(level=2, block=number, data=packed(EMPTY), seconds=seconds, fingerprint="{}")


def begun(folder: Path, *blocks: Block, identity: Identity = MINE, finished: bool = False) -> None:
    """A ledger of these blocks, closed again."""
    with Ledger(folder) as ledger:
        ledger.clear(identity)
        for one in blocks:
            ledger.put(one)
        if finished:
            ledger.finish()


def refusal(folder: Path, identity: Identity = MINE, **options: bool) -> str:
    with Ledger(folder) as ledger, pytest.raises(AuditFolderError) as caught:
        ledger.resumes(identity, **{"resume": False, "replace": False, **options})
    return str(caught.value)


def rows(folder: Path) -> list[tuple[int, int]]:
    with closing(sqlite3.connect(folder / LEDGER)) as connection:
        return connection.execute("SELECT level, block FROM blocks ORDER BY level, block").fetchall()


def test_a_ledger_gives_back_what_it_was_given(tmp_path: Path) -> None:
    """Blocks by their keys, with seconds and fingerprint; those from before are known as kept."""
    begun(tmp_path, block(0, 0.25), block(7))
    with Ledger(tmp_path) as ledger:
        assert ledger.resumes(MINE, resume=True, replace=False)
        assert ledger.kept == {(2, 0), (2, 7)}
        assert ledger.block((2, 0)) == block(0, 0.25)
        assert (2, 7) in ledger
        assert (2, 1) not in ledger
        ledger.put(block(1))
        assert (2, 1) in ledger
        assert ledger.kept == {(2, 0), (2, 7)}
    assert rows(tmp_path) == [(2, 0), (2, 1), (2, 7)]
    assert [path.name for path in tmp_path.iterdir()] == [LEDGER]


def test_blocks_of_an_unfinished_audit_are_not_thrown_away(tmp_path: Path) -> None:
    """Without --resume or --replace they are refused in words that say how many; with --replace they make room."""
    begun(tmp_path, block(0))
    assert refusal(tmp_path) == (
        f"{tmp_path}: holds this audit, unfinished (1 block is done); accepted: --resume to go on with it, --replace "
        "to begin anew, or --out with another folder"
    )
    other = replace(MINE, fingerprint="sha256:2")
    begun_with = f"{tmp_path}: holds another audit, unfinished (1 block is done; the kernel has changed); {OTHERWISE}"
    assert refusal(tmp_path, other) == begun_with
    with Ledger(tmp_path, replace=True) as ledger:
        assert not ledger.resumes(other, resume=False, replace=True)
        ledger.clear(other)
    assert rows(tmp_path) == []


@pytest.mark.parametrize("blocks", [(), (block(0),)])
def test_what_is_finished_or_empty_makes_room(tmp_path: Path, blocks: tuple[Block, ...]) -> None:
    """A finished audit, and one that was stopped before its first block, are begun anew without a word."""
    begun(tmp_path, *blocks, finished=bool(blocks))
    with Ledger(tmp_path) as ledger:
        assert not ledger.resumes(MINE, resume=False, replace=False)
    with Ledger(tmp_path) as ledger:
        assert ledger.resumes(MINE, resume=True, replace=False) == bool(blocks)


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        ({"fingerprint": "sha256:2"}, "the kernel has changed"),
        ({"run": "k.py:g"}, "the kernel has changed"),
        ({"asked": '{"a": {"b": 2, "c": 2}, "d": 1}'}, "the audit file has changed (a.b, d)"),
        ({"versions": {"numpy": "2.5"}}, "numpy is 2.5 and was 2.4"),
        ({"versions": {"scipy": "1.0"}}, "numpy is none and was 2.4; scipy is 1.0 and was none"),
        ({"run": "g", "versions": {"numpy": "3"}}, "the kernel has changed; numpy is 3 and was 2.4"),
    ],
)
def test_what_has_changed_is_not_resumed(tmp_path: Path, change: dict[str, object], reason: str) -> None:
    """The refusal names every difference, and the blocks stay."""
    begun(tmp_path, block(0), finished=True)
    assert refusal(tmp_path, replace(MINE, **change), resume=True) == (  # type: ignore[arg-type]  # by the table above
        f"{tmp_path}: the audit in this folder cannot be resumed: {reason}; accepted: kernel, audit file and versions "
        "as they were when it began, --out with another folder, or --replace"
    )
    assert rows(tmp_path) == [(2, 0)]


def test_a_folder_holds_one_audit_at_a_time(tmp_path: Path) -> None:
    """A second one is refused by the folder's name while the first is open, also before its first block, not after."""
    with Ledger(tmp_path) as ledger:
        message = f"{tmp_path}: another audit is running in this folder; accepted: --out with another folder, or wait"
        for step in (lambda: None, lambda: ledger.clear(MINE), lambda: ledger.put(block(0))):
            step()
            with pytest.raises(AuditFolderError) as caught:
                Ledger(tmp_path, replace=True)
            assert str(caught.value) == message
    Ledger(tmp_path).close()


def test_a_process_that_dies_lets_go_and_loses_nothing_that_was_written(tmp_path: Path) -> None:
    """Killed in the middle of a transaction: what was committed is there, what was not is gone, the lock too."""
    program = (
        "import os, signal, sys; from pathlib import Path; sys.path.insert(0, sys.argv[2])\n"
        "from test_store import *\n"
        "ledger = Ledger(Path(sys.argv[1])); ledger.clear(MINE)\n"
        "ledger.put(block(0, 1.0)); ledger.put(block(1, 0.0)); os.kill(os.getpid(), signal.SIGKILL)"
    )
    done = subprocess.run([sys.executable, "-c", program, tmp_path, Path(__file__).parent], check=False)
    assert done.returncode == -9
    with Ledger(tmp_path) as ledger:
        assert ledger.resumes(MINE, resume=True, replace=False)
        assert ledger.kept == {(2, 0)}


def test_quick_blocks_are_written_together_and_slow_ones_at_once(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A block is committed if it took a second, or the last commit is a second ago; else with the next."""
    now = [100.0]
    monkeypatch.setattr(store.time, "monotonic", lambda: now[0])
    with Ledger(tmp_path) as ledger:
        ledger.clear(MINE)
        written = []
        for number, (moment, seconds) in enumerate(
            [(100.1, 0.1), (100.9, 0.9), (101.0, 0.1), (101.1, 1.0), (102, 0.9)]
        ):
            now[0] = moment
            ledger.put(block(number, seconds))
            written.append(not ledger._connection.in_transaction)
    assert written == [False, False, True, True, False]
    assert len(rows(tmp_path)) == 5


@pytest.mark.parametrize(
    "data", [b"no database at all, and longer than a header" * 40, b"SQLite format 3\0" + bytes(84)]
)
def test_a_file_that_is_no_ledger_is_refused_and_can_be_replaced(tmp_path: Path, data: bytes) -> None:
    """Other bytes under its name are not written over, except with --replace."""
    path = tmp_path / LEDGER
    path.write_bytes(data)
    with pytest.raises(AuditFolderError, match=rf"^{path}: .*(not a database|malformed).*; {OTHERWISE}$"):
        begun(tmp_path)
    assert path.read_bytes() == data
    with Ledger(tmp_path, replace=True) as ledger:
        ledger.clear(MINE)
    assert rows(tmp_path) == []


def test_another_database_is_no_ledger(tmp_path: Path) -> None:
    """A database of somebody else's tables is refused."""
    with closing(sqlite3.connect(tmp_path / LEDGER)) as connection:
        connection.execute("CREATE TABLE other (x)")
    assert refusal(tmp_path) == f"{tmp_path / LEDGER}: is no ledger of narrowgauge; {OTHERWISE}"


def test_a_damaged_tally_is_an_error_of_the_file(tmp_path: Path) -> None:
    """The message names file, level and block."""
    begun(tmp_path, replace(block(3), data=b"\x00"))
    with Ledger(tmp_path) as ledger:
        ledger.resumes(MINE, resume=True, replace=False)
        with pytest.raises(AuditFolderError, match=rf"^{tmp_path / LEDGER}: level 2, block 3 cannot be read: "):
            ledger.block((2, 3))


@pytest.mark.parametrize("column", ["level", "seconds", "fingerprint", "tally"])
def test_a_block_that_is_not_as_it_was_written_is_run_again(tmp_path: Path, column: str) -> None:
    """One flipped bit anywhere in it, and the block is dropped and counted; the others are taken."""
    begun(tmp_path, *(block(number, 0.25) for number in range(3)))
    flipped = {
        "level": 3,
        "seconds": 0.5,
        "fingerprint": "{|",
        "tally": bytes([packed(EMPTY)[0] ^ 1, *packed(EMPTY)[1:]]),
    }
    with closing(sqlite3.connect(tmp_path / LEDGER)) as connection:
        connection.execute(f"UPDATE blocks SET {column} = ? WHERE block = 1", (flipped[column],))
        connection.commit()
    with Ledger(tmp_path) as ledger:
        assert ledger.resumes(MINE, resume=True, replace=False)
        assert (ledger.kept, ledger.damaged) == ({(2, 0), (2, 2)}, 1)
        assert (2, 1) not in ledger
    assert rows(tmp_path) == [(2, 0), (2, 2)]


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        ("UPDATE audit SET value = '{' WHERE name = 'asked'", "its ledger is damaged"),
        (
            "UPDATE audit SET name = 'schemb' WHERE name = 'schema'",
            "its ledger is of another kind (unknown, not narrowgauge-blocks/3)",
        ),
    ],
)
def test_a_damaged_identity_is_no_identity(tmp_path: Path, change: str, reason: str) -> None:
    """What cannot be compared is not resumed, and is no fault of the program's."""
    begun(tmp_path, block(0))
    with closing(sqlite3.connect(tmp_path / LEDGER)) as connection:
        connection.execute(change)
        connection.commit()
    assert f"cannot be resumed: {reason}; accepted: " in refusal(tmp_path, resume=True)


@pytest.mark.parametrize("offset", range(4096, 20480, 4096))
@pytest.mark.parametrize("byte", [0x00, 0x41, 0xFF])
def test_a_damaged_ledger_can_be_replaced(tmp_path: Path, offset: int, byte: int) -> None:
    """Wherever pages were written over: without --replace a message that names it and promises nothing else."""
    begun(tmp_path, *(replace(block(number), fingerprint="x" * 3000) for number in range(8)))
    path = tmp_path / LEDGER
    data = bytearray(path.read_bytes())
    assert len(data) > offset + 4000
    data[offset : offset + 4000] = bytes([byte]) * 4000
    path.write_bytes(data)
    with Ledger(tmp_path) as ledger:
        said = ""
        try:
            ledger.resumes(MINE, resume=True, replace=False)
            ledger.put(block(9, 1.0))
        except AuditFolderError as problem:
            said = str(problem)
    assert "--resume goes on" not in said
    assert not said or said.endswith("--replace")
    path.write_bytes(data)
    with Ledger(tmp_path, replace=True) as ledger:
        ledger.clear(MINE)
        ledger.put(block(1, 1.0))
        ledger.finish()
    assert rows(tmp_path) == [(2, 1)]


def test_a_folder_in_its_place_is_refused(tmp_path: Path) -> None:
    """What cannot be opened is an error with the system's reason."""
    (tmp_path / LEDGER).mkdir()
    with pytest.raises(AuditFolderError) as caught:
        Ledger(tmp_path)
    assert str(caught.value) == f"{tmp_path / LEDGER}: cannot be used: unable to open database file; {OTHERWISE}"


FILLS = """
import resource, sys
from dataclasses import replace
from pathlib import Path
sys.path.insert(0, sys.argv[2])
from test_store import *
with Ledger(Path(sys.argv[1])) as ledger:
    ledger.clear(MINE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (200_000, 200_000))
    try:
        for number in range(100):
            ledger.put(replace(block(number, 1.0), fingerprint="x" * 10_000))
    except AuditFolderError as problem:
        print(number, problem)
"""


@pytest.mark.skipif(not hasattr(resource, "RLIMIT_FSIZE"), reason="the system limits no file's size")
def test_a_full_disk_is_an_error_and_what_was_finished_stays(tmp_path: Path) -> None:
    """Where the file may grow no more, the message names it, and every block before that one is there to go on with."""
    command = [sys.executable, "-c", FILLS, tmp_path, Path(__file__).parent]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    number, _, message = done.stdout.strip().partition(" ")
    assert message.startswith(f"{tmp_path / LEDGER}: cannot be written: ")
    assert message.endswith("; the blocks that were written before stay, and --resume goes on with them")
    assert 5 < int(number) < 25
    with Ledger(tmp_path) as ledger:
        assert ledger.resumes(MINE, resume=True, replace=False)
        assert ledger.kept == {(2, earlier) for earlier in range(int(number))}


def test_a_full_database_is_the_same_error(tmp_path: Path) -> None:
    """SQLite's own word for a full disk is passed on."""
    with Ledger(tmp_path) as ledger:
        ledger.clear(MINE)
        ledger._connection.execute("PRAGMA max_page_count = 8")
        with pytest.raises(
            AuditFolderError, match=rf"^{tmp_path / LEDGER}: cannot be written: database or disk is full"
        ):
            ledger.put(replace(block(0), fingerprint="x" * 100_000))


def test_moments_and_series_are_what_a_tally_is_made_of() -> None:
    """The ledger's bytes hold every field of these records: a new field must be packed, too."""
    assert set(Moments.__dataclass_fields__) == {"count", "mean", "m2", "m3", "m4"}
    fields = {"moments", "events", "largest", "smallest", "distinct", "nonfinite"}
    assert set(Series.__dataclass_fields__) == fields
