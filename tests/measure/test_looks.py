"""Looks at scenarios in the ledger: kept, given back, and run again where they are damaged."""

from __future__ import annotations

import sqlite3
from contextlib import closing
from pathlib import Path

import msgspec
import pytest

from narrowgauge.measure.packing import packed
from narrowgauge.measure.scenarios import Look
from narrowgauge.measure.store import LEDGER, Identity, Ledger
from narrowgauge.measure.tally import LevelTally
from narrowgauge.measure.task import Block

MINE = Identity(run="k.py:f", fingerprint="sha256:1", asked="{}", versions={"numpy": "2.4"})
EMPTY = LevelTally(level=2, paths=1024, dropped=0, blocks=1, quantities={}, raised={})


def look(scenario: int, number: int, problem: str | None = None) -> Look:
    data = msgspec.msgpack.encode(([packed(EMPTY)], problem))
    return Look(scenario=scenario, look=number, data=data, seconds=0.25, fingerprint="{}")


@pytest.fixture
def begun(tmp_path: Path) -> Path:
    """A ledger with a block and two looks, closed again."""
    with Ledger(tmp_path) as ledger:
        ledger.clear(MINE)
        ledger.put(Block(level=7, block=0, data=packed(EMPTY), seconds=0.0, fingerprint="{}"))
        ledger.put_look(look(7, 0))
        ledger.put_look(look(3, 1, "too dear"))
    return tmp_path


def test_looks_are_given_back_apart_from_blocks(begun: Path) -> None:
    """By scenario and number, with all that they hold; those of nothing are None."""
    with Ledger(begun) as ledger:
        assert ledger.resumes(MINE, resume=True, replace=False)
        assert (ledger.kept, ledger.kept_looks) == ({(7, 0)}, {(7, 0), (3, 1)})
        assert ledger.look((3, 1)) == look(3, 1, "too dear")
        assert ledger.look((3, 0)) is None
    assert look(3, 1, "too dear").opened() == ([EMPTY], "too dear")


def test_a_damaged_look_is_dropped_and_counted(begun: Path) -> None:
    """It is run again, as a block would be; the others stay."""
    with closing(sqlite3.connect(begun / LEDGER)) as connection:
        connection.execute("UPDATE looks SET tallies = ? WHERE scenario = 3", (look(3, 1).data,))
        connection.commit()
    with Ledger(begun) as ledger:
        ledger.resumes(MINE, resume=True, replace=False)
        assert (ledger.damaged, ledger.kept_looks) == (1, {(7, 0)})
        assert ledger.look((3, 1)) is None


def test_an_audit_begun_anew_has_no_looks(begun: Path) -> None:
    """They go with the blocks."""
    with Ledger(begun) as ledger:
        ledger.clear(MINE)
    with Ledger(begun) as ledger:
        assert not ledger.resumes(MINE, resume=True, replace=False)
        assert ledger.look((7, 0)) is None


def test_what_is_no_look_is_refused() -> None:
    """Bytes that hold something else are no tallies."""
    with pytest.raises(ValueError, match="not a packed look"):
        Look(scenario=1, look=0, data=b"\x93", seconds=0.0, fingerprint="{}").opened()
