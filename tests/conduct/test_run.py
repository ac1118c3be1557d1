"""Looks, blocks and their order, what a watcher hears, and that the same audit gives the same bits."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import msgspec
import pytest
from audit_cases import GEOMETRIC, audited, bits, file_for

from narrowgauge.api import run_audit
from narrowgauge.conduct.run import Outcome, Plan, run
from narrowgauge.judge.schemes import LevelJudgement
from narrowgauge.kernel.auditfile import AuditFile, read_audit_file
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.tally import LevelTally
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.canonical import canonical_text


class Log:
    """A watcher that keeps what it hears."""

    def __init__(self) -> None:
        self.plans: list[Plan] = []
        self.looks: list[tuple[int, int, tuple[int, ...], int]] = []
        self.steps: list[int] = []

    def planned(self, plan: Plan) -> None:
        self.plans.append(plan)

    def look(self, number: int, looks: int, levels: Sequence[int], path_steps: int) -> None:
        self.looks.append((number, looks, tuple(levels), path_steps))
        self.steps.append(0)

    def advanced(self, steps: int) -> None:
        self.steps[-1] += steps


def never(judgement: LevelJudgement) -> bool:
    return False


def conducted(file: AuditFile, **options: Any) -> Outcome:
    return run(file, find_kernel(file), **options)


def paths_of(outcome: Outcome) -> list[int]:
    return [outcome.tallies[level].paths for level in sorted(outcome.tallies)]


@pytest.mark.parametrize(
    ("paths", "most", "looks"),
    [
        (1024, 1024, 1),
        (1024, 2047, 1),
        (1024, 2048, 2),
        (1024, 5000, 3),
        (1000, 4000, 3),
        (1, 5, 1),
    ],
)
def test_looks_double_while_they_are_within_the_budget(tmp_path: Path, paths: int, most: int, looks: int) -> None:
    """Levels that never settle are judged at `paths`, twice that, four times; each look has an equal share of alpha.

    A level has whole blocks: the least number of them that reaches the look. A look that draws no block is none.
    """
    asked = {"paths": str(paths), "most_paths": str(most), "confidence": "0.97"}
    log = Log()
    outcome = conducted(file_for(tmp_path, GEOMETRIC, sampling=asked), settled=never, watcher=log)
    assert [(number, of, levels) for number, of, levels, _ in log.looks] == [
        (number, looks, (0, 1, 2)) for number in range(1, looks + 1)
    ]
    last = paths * 2 ** (looks - 1)
    assert last <= most < max(2 * last, 1025)
    assert paths_of(outcome) == [-(-last // 1024) * 1024] * 3
    assert outcome.alpha == (1 - 0.97) / looks


def test_settled_levels_draw_no_more(tmp_path: Path) -> None:
    """Only levels that the rule does not settle are drawn and judged again; all settled ends the audit."""
    file = file_for(tmp_path, GEOMETRIC, sampling={"most_paths": "4096"})
    log = Log()
    outcome = conducted(file, settled=lambda judgement: judgement.level != 1, watcher=log)
    assert [levels for _, _, levels, _ in log.looks] == [(0, 1, 2), (1,), (1,)]
    assert paths_of(outcome) == [1024, 4096, 1024]
    assert outcome.judgements[1].views["value"].tally.values["float64"].moments.total == 4096
    log = Log()
    assert paths_of(conducted(file, settled=lambda judgement: True, watcher=log)) == [1024] * 3
    assert len(log.looks) == 1


def test_an_audit_settles_what_is_not_undecided(tmp_path: Path) -> None:
    """By itself an audit draws until no format of a level is undecided, or the budget ends."""
    file = file_for(tmp_path, GEOMETRIC, target={"rmse": "1e-3"}, sampling={"most_paths": "16384"})
    outcome = conducted(file)
    for level, judgement in outcome.judgements.items():
        open_ones = [arm for arms in judgement.arms.values() for arm in arms.values() if arm.verdict == "undecided"]
        assert judgement.settled == (not open_ones)
        assert outcome.tallies[level].paths == 16384 or not open_ones
    assert len(set(paths_of(outcome))) > 1


def test_a_block_larger_than_a_look_is_drawn_whole(tmp_path: Path) -> None:
    """Blocks of 3,072 paths: one serves 1,024 and 2,048 paths, which are one look, and 4,096 needs a second."""
    asked = {"block": "3072", "paths": "1024", "most_paths": "4096"}
    log = Log()
    outcome = conducted(file_for(tmp_path, GEOMETRIC, sampling=asked), settled=never, watcher=log)
    assert paths_of(outcome) == [6144] * 3
    assert [steps > 0 for _, _, _, steps in log.looks] == [True, True]


def recorded(monkeypatch: pytest.MonkeyPatch) -> list[tuple[int, int]]:
    """Return the keys of all blocks that are run from now on, in order."""
    keys: list[tuple[int, int]] = []
    original = BlockRunner.run

    def noted(self: BlockRunner, level: int, block: int) -> LevelTally:
        keys.append((level, block))
        return original(self, level, block)

    monkeypatch.setattr(BlockRunner, "run", noted)
    return keys


def test_blocks_are_run_once_each_in_the_order_of_their_keys(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Level after level at each look, blocks 0, 1, 2 ... of each; with a watcher the timed block comes first."""
    file = file_for(tmp_path, GEOMETRIC, sampling={"most_paths": "4096"})
    keys = recorded(monkeypatch)
    conducted(file, settled=never)
    expected = [(level, block) for blocks in ((0,), (1,), (2, 3)) for level in (0, 1, 2) for block in blocks]
    assert keys == expected
    keys.clear()
    conducted(file, settled=never, watcher=Log())
    assert keys[0] == (2, 0)
    assert keys == [keys[0], *(key for key in expected if key != keys[0])]


def test_a_watcher_hears_what_is_run(tmp_path: Path) -> None:
    """Path steps count fine and coarse steps of every arm: levels of 1, 2 and 4 steps take 1, 3 and 6 in each of 4."""
    log = Log()
    conducted(file_for(tmp_path, GEOMETRIC, sampling={"most_paths": "4096"}), settled=never, watcher=log)
    (plan,) = log.plans
    each = [4 * steps for steps in (1, 3, 6)]
    assert [(one.level, one.steps, one.paths_first_look, one.paths_most) for one in plan.levels] == [
        (0, 1, 1024, 4096),
        (1, 2, 1024, 4096),
        (2, 4, 1024, 4096),
    ]
    assert (plan.path_steps, plan.most_path_steps) == (1024 * sum(each), 4096 * sum(each))
    assert [steps for *_, steps in log.looks] == [1024 * sum(each), 1024 * sum(each), 2048 * sum(each)]
    assert log.steps == [steps for *_, steps in log.looks]
    assert 0 < plan.seconds
    assert plan.most_seconds == pytest.approx(4 * plan.seconds, rel=8 * sys.float_info.epsilon)


def text(record: AuditRecord) -> str:
    """Return the record as it is written, without the one part that may differ between two runs."""
    return canonical_text(msgspec.structs.replace(record, provenance={}).document())


def test_an_uncoupled_ladder_has_no_coarse_steps(tmp_path: Path) -> None:
    """Without level differences a path takes the steps of its own level alone."""
    log = Log()
    conducted(file_for(tmp_path, GEOMETRIC, kernel={"coupling": '"none"'}), settled=never, watcher=log)
    assert log.plans[0].path_steps == 1024 * 4 * (1 + 2 + 4)


def test_the_same_audit_gives_the_same_record(tmp_path: Path) -> None:
    """Byte for byte, provenance aside, also with a watcher, whose plan runs a block early; another seed differs."""
    file = file_for(tmp_path, GEOMETRIC, target={"rmse": "1e-3"})
    first = run_audit(file, None)
    assert text(run_audit(file, None).record) == text(first.record)
    assert text(run_audit(file, None, watcher=Log()).record) == text(first.record)
    assert first.record.provenance
    other = file_for(tmp_path, GEOMETRIC, target={"rmse": "1e-3"}, sampling={"seed": "2"})
    assert text(run_audit(other, None).record) != text(first.record)


def test_another_process_gives_the_same_files(tmp_path: Path) -> None:
    """A fresh interpreter with other hashes and several threads writes the same two files, provenance aside."""
    here = audited(tmp_path, GEOMETRIC, target={"rmse": "1e-3"})
    assert here.folder is not None
    program = (
        "import sys; from pathlib import Path; from narrowgauge.api import run_audit; "
        "from narrowgauge.kernel.auditfile import read_audit_file; "
        "run_audit(read_audit_file(Path(sys.argv[1])), Path(sys.argv[2]))"
    )
    there = tmp_path / "there"
    environment = {**os.environ, "PYTHONHASHSEED": "271828", "OMP_NUM_THREADS": "4", "OPENBLAS_NUM_THREADS": "4"}
    command = [sys.executable, "-c", program, str(tmp_path / "audit.toml"), str(there)]
    subprocess.run(command, env=environment, check=True)
    assert (there / "levels.csv").read_bytes() == (here.folder / "levels.csv").read_bytes()
    documents = [json.loads((folder / "audit.json").read_text("utf-8")) for folder in (there, here.folder)]
    for document in documents:
        assert document.pop("provenance")
    assert canonical_text(documents[0]) == canonical_text(documents[1])


def test_blocks_run_in_any_order_and_merged_by_key_are_the_audit(tmp_path: Path) -> None:
    """Levels finest first, blocks last first, each by a runner of its own: merged by key they are the audit's bits."""
    file = file_for(tmp_path, GEOMETRIC, sampling={"most_paths": "4096"})
    outcome = conducted(file, settled=never)
    kernel = find_kernel(file)
    found = {(level, k): BlockRunner(file, kernel).run(level, k) for level in (2, 1, 0) for k in (3, 2, 1, 0)}
    for level in (0, 1, 2):
        merged = found[level, 0]
        for k in (1, 2, 3):
            merged += found[level, k]
        assert bits(merged) == bits(outcome.tallies[level])


def test_the_order_of_keys_in_the_audit_file_does_not_matter(tmp_path: Path) -> None:
    """The tables of a file in another order ask for the same audit, and get the same record."""
    file = file_for(tmp_path, GEOMETRIC)
    path = tmp_path / "audit.toml"
    tables = path.read_text().split("\n\n")
    path.write_text("\n\n".join(reversed(tables)))
    assert text(run_audit(read_audit_file(path), None).record) == text(run_audit(file, None).record)
