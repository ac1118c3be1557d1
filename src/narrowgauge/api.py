"""The audit as a Python call, and its result."""

from __future__ import annotations

import contextlib
import json
import os
import tempfile
import time
from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from msgspec.structs import replace as changed

from narrowgauge.conduct.account import account
from narrowgauge.conduct.branches import branches_entry
from narrowgauge.conduct.domain import Corners, explore
from narrowgauge.conduct.gate import claimed_corners, gate_seed, reduced
from narrowgauge.conduct.lines import line_study, studied
from narrowgauge.conduct.owntrial import examine_own
from narrowgauge.conduct.run import Outcome, Watcher, run
from narrowgauge.conduct.separated import draws_entry
from narrowgauge.conduct.trial import try_arms
from narrowgauge.errors import AuditFileError, AuditFolderError, DispatchError, KernelError, NarrowgaugeError
from narrowgauge.kernel.auditfile import AuditFile, audit_file_from, read_audit_file, with_draws
from narrowgauge.kernel.identity import versions_of
from narrowgauge.kernel.loading import KernelSource, find_kernel, refuse_nested
from narrowgauge.measure.block import BlockRunner
from narrowgauge.measure.drawplan import worked_out
from narrowgauge.measure.provenance import provenance
from narrowgauge.measure.store import Identity, Ledger
from narrowgauge.measure.task import Bench, pinned
from narrowgauge.measure.workers import Workers, engine_for
from narrowgauge.policy.gate import ALPHA, concerned, fails_for_now, judge, levels_open, second
from narrowgauge.policy.gatedomain import DOMAIN, LEAST_EDGE
from narrowgauge.policy.gatefacts import settings_facts
from narrowgauge.policy.gatefigures import arms_of
from narrowgauge.policy.gatefile import Held, held_to, stopped
from narrowgauge.record.audit import AuditRecord, KernelEntry, TrialEntry
from narrowgauge.record.canonical import canonical_text, read_strict, write_atomically
from narrowgauge.record.gate import Finding, GateEntry
from narrowgauge.record.linetable import line_rows, lines_csv
from narrowgauge.record.source import SourceEntry
from narrowgauge.record.table import accumulation_rows, level_rows, levels_csv

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Audit", "audit", "gate", "gate_held", "gate_workers", "run_audit", "try_out"]

_RECORD, _LEVELS, _LINES = "audit.json", "levels.csv", "lines.csv"
_LONGEST_BLOCK = 3600.0  # seconds of a gate's block, which has few paths


class Audit:
    """The result of an audit: `record` is the document, the tables are made when asked; `folder` holds its files."""

    def __init__(self, record: AuditRecord, folder: Path | None) -> None:
        self.record = record
        self.folder = folder

    @property
    def levels(self) -> pd.DataFrame:
        """One row per quantity, level and arm."""
        return _frame(level_rows(self.record))

    @property
    def accumulation(self) -> pd.DataFrame:
        """One row per quantity, arm and law (error, correction)."""
        return _frame(accumulation_rows(self.record))

    @property
    def lines(self) -> pd.DataFrame:
        """One row per line of the kernel, operation and route, with its count in the trial run."""
        fields = ("file", "line", "operation", "route", "count")
        found = self.record.reach.lines if self.record.reach is not None else []
        return _frame([{name: getattr(line, name) for name in fields} for line in found])

    @property
    def shares(self) -> pd.DataFrame:
        """One row per format, quantity and line or input: its share of the variances; no rows without [lines]."""
        return _frame(line_rows(self.record))


def audit(
    source: str | Path | Mapping[str, object],
    *,
    out: str | Path | None = None,
    workers: int = 1,
    executor: Any = None,
    resume: bool = False,
    quiet: bool = False,
) -> Audit:
    """Audit a kernel and return the result.

    `source` is the path of an audit file, or a mapping of its shape whose kernel.run may be a function. With `out` the
    record, the table of levels and the finished blocks are written into that folder, which must not hold another audit;
    with `resume` an audit that was stopped there goes on. Unless `quiet` a progress bar is shown on a terminal.

    `workers` processes run blocks at a time, or `executor` does, any of concurrent.futures or of its kind; the record
    is the same whoever does. A function travels to other processes by the name under which it can be imported. Raises
    NarrowgaugeError for whatever is wrong with the input.
    """
    who = Workers(number=workers, executor=executor)
    if resume and out is None:
        raise AuditFolderError("audit: resume = True needs out; accepted: the folder of the audit that was stopped")
    if not isinstance(source, (str, Path, Mapping)):
        raise AuditFileError("audit", "", f"{source!r} is no audit file", "a path, or a mapping of its shape")
    file = audit_file_from(source) if isinstance(source, Mapping) else read_audit_file(Path(source))
    folder = None if out is None else Path(out)
    if quiet:
        return run_audit(file, folder, resume=resume, workers=who)
    from narrowgauge.report.text import Progress  # rich is needed for the bar alone

    with Progress(quiet=True) as watcher:
        return run_audit(file, folder, resume=resume, workers=who, watcher=watcher)


def run_audit(
    file: AuditFile,
    out: Path | None,
    *,
    replace: bool = False,
    resume: bool = False,
    workers: Workers | None = None,
    watcher: Watcher | None = None,
    tell: Callable[[str], None] | None = None,
    open_levels: Callable[[AuditRecord], Collection[int]] | None = None,
    watched: bool = True,
    corners: Corners | None = None,
) -> Audit:
    """Run an audit and write its files into `out`, if given.

    With `resume` the blocks that an audit left there are not run again; `tell` hears where that is not as it may be
    thought. The levels that `open_levels` returns of a record draw more paths; without it those that are undecided.
    `watched`: every number of a few paths is looked at, too. `corners` are tried in place of [domain].
    Raises AuditFolderError where `out` holds another audit, or an unfinished one that is not resumed, and
    `replace` is false, before anything is measured; KernelError inside another audit.
    """
    start = time.perf_counter()
    refuse_nested(file.source)
    place = None if out is None else _Folder.of(out)  # a kernel may go to another directory
    kernel = find_kernel(file)
    with contextlib.ExitStack() as held:
        engine = held.enter_context(engine_for(file, kernel, workers or Workers()))
        if file.kernel.takes == "rng":
            file = with_draws(file, *engine.call(_draws))
        entry = KernelEntry(run=file.kernel.run, fingerprint=kernel.digest())
        source = _source(kernel)
        ledger = None
        if place is not None:
            ledger = held.enter_context(_claim(place, file, entry, replace=replace, resume=resume))
            if tell is not None and resume:
                _tell(tell, place.shown, ledger)
        rule = None
        if open_levels is not None:

            def rule(so_far: Outcome) -> Collection[int]:
                return open_levels(account(file, so_far, entry, {}))

        outcome = run(file, kernel, watcher=watcher, engine=engine, ledger=ledger, open_levels=rule, studied=watched)
        resumed = len(ledger.kept) if ledger is not None else 0
        damaged = ledger.damaged if ledger is not None else 0
        domain = explore(file, outcome, engine=engine, ledger=ledger, watcher=watcher, corners=corners)
        where = outcome.fingerprints if domain is None else tuple(sorted({*outcome.fingerprints, *domain.fingerprints}))
        made = provenance(time.perf_counter() - start, engine.title, where, resumed, damaged)
        made["imported"] = versions_of(source.imports)
        if domain is not None:
            made["resumed_looks"] = len(ledger.kept_looks) if ledger is not None else 0
        record = changed(account(file, outcome, entry, made), source=source)
        if domain is not None:
            record = changed(record, domain=domain.entry)
        study = line_study(file, record)
        if study is not None and study.finest and tell is not None and watcher is not None:
            tell(f"all levels are measured; the lines of {', '.join(study.finest)} are studied")
        record = changed(record, lines=studied(study, engine))
        if place is not None and ledger is not None:
            _write(place, _RECORD, canonical_text(record.document()))
            _write(place, _LEVELS, levels_csv(record))
            (place.path / _LINES).unlink(missing_ok=True)  # of an audit that is replaced
            if record.lines is not None and record.lines.formats:
                _write(place, _LINES, lines_csv(record))
            ledger.finish()
    return Audit(record, out)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Folder:
    """A folder wherever the process goes, and as messages call it."""

    path: Path
    shown: Path

    @classmethod
    def of(cls, out: Path) -> _Folder:
        try:
            return cls(path=Path(os.path.abspath(out)), shown=out)
        except OSError as problem:  # the current directory is gone
            raise _unusable(out, problem) from None


def _tell(tell: Callable[[str], None], folder: Path, ledger: Ledger) -> None:
    """Tell that there is less to go on with than was asked for."""
    if ledger.damaged:
        blocks = "1 block is" if ledger.damaged == 1 else f"{ledger.damaged} blocks are"
        tell(f"{folder}: {blocks} damaged and run again")
    elif not ledger.kept:
        tell(f"{folder}: holds no finished blocks to go on with; the audit begins anew")


def _source(kernel: KernelSource) -> SourceEntry:
    """Return how a policy will know the kernel again."""
    found = kernel.origin()
    return SourceEntry(
        fingerprint=found.fingerprint,
        covers=found.covers,
        modules=list(found.modules),
        imports=list(found.imports),
    )


def _draws(bench: Bench) -> tuple[int, Literal["sum", "none"]]:
    """Return what a kernel that draws for itself turns out to draw per step, and whether its levels are coupled."""
    with pinned():
        kernel = worked_out(bench.file, bench.kernel).kernel
    return kernel.factors, kernel.coupling


def try_out(file: AuditFile) -> TrialEntry:
    """Run the identity run and one small run of every format, and make the approximate draws; nothing is written."""
    kernel = find_kernel(file)
    if file.kernel.rounds == "itself":
        with engine_for(file, kernel, Workers()) as engine:
            return engine.call(_own_trial)
    file = worked_out(file, kernel)
    runner = BlockRunner(file, kernel)
    found = _with_draws(try_arms(file, kernel, runner), file, runner)
    if found.faults:  # what a branch would meet as well
        return found
    with pinned():
        return changed(found, branches=branches_entry(file, kernel, runner, quick=True))


def _own_trial(bench: Bench) -> TrialEntry:
    with pinned():
        found = _with_draws(examine_own(bench.file, bench.kernel, bench.runner), bench.file, bench.runner)
        return changed(found, branches=branches_entry(bench.file, bench.kernel, bench.runner, quick=True))


def _with_draws(trial: TrialEntry, file: AuditFile, runner: BlockRunner) -> TrialEntry:
    return changed(trial, draws=draws_entry(file, runner.approximation))


def _claim(place: _Folder, file: AuditFile, kernel: KernelEntry, *, replace: bool, resume: bool) -> Ledger:
    """Make the folder, make sure that it holds no other audit, and return its ledger, locked."""
    folder = place.path
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            pass  # better now than when the audit is done
        path = folder / _RECORD
        data = path.read_bytes() if path.exists() else None
    except OSError as problem:
        raise _unusable(place.shown, problem) from None
    identity = Identity.of(file, kernel.fingerprint)
    ledger = Ledger(folder, replace=replace, shown=place.shown)
    try:
        # A ledger that is gone on with is this audit's, whatever record an earlier one left beside it.
        if not ledger.resumes(identity, resume=resume, replace=replace):
            if data is not None and not replace:
                _check_record(place.shown, data, file, kernel)
            ledger.clear(identity)
    except BaseException:  # an interrupt, too, must not leave the ledger locked; raised on
        ledger.close()
        raise
    return ledger


def _check_record(folder: Path, data: bytes, file: AuditFile, kernel: KernelEntry) -> None:
    """Raise AuditFolderError unless the record in a folder is of this audit."""
    path = folder / _RECORD
    accepted = "accepted: --out with another folder, or --replace"
    text = data.decode("utf-8", "replace")  # what is not UTF-8 is no audit of ours, whatever it says
    try:
        found = read_strict(text, str(path))
    except NarrowgaugeError as problem:
        raise AuditFolderError(f"{folder}: holds an audit.json that cannot be read ({problem}); {accepted}") from None
    mine: dict[str, object] = {"kernel": {"run": kernel.run, "fingerprint": kernel.fingerprint}, "asked": file.asked()}
    for key, value in mine.items():
        there = found.get(key) if isinstance(found, dict) else None
        if there != json.loads(json.dumps(value)):
            what = "another kernel, or another state of it" if key == "kernel" else "other settings"
            raise AuditFolderError(f"{folder}: holds another audit ({what}); {accepted}")


def _unusable(folder: Path, problem: OSError) -> AuditFolderError:
    return AuditFolderError(f"{folder}: cannot be used for the results: {problem.strerror}")


def _write(folder: _Folder, name: str, text: str) -> None:
    try:
        write_atomically(folder.path / name, text)
    except OSError as problem:
        raise AuditFolderError(f"{folder.shown / name}: cannot be written: {problem.strerror}") from None


def _frame(rows: list[dict[str, object]]) -> pd.DataFrame:
    import pandas as pd  # only when a table is asked for

    return pd.DataFrame(rows)


def gate(audit: str | Path, *, seed: int | None = None, workers: int = 2) -> GateEntry:
    """Measure the kernel of an audit file afresh and return whether its policy still holds.

    The draws follow from the policy's seed, or from `seed`. The kernel runs in worker processes alone: one that ends
    its process cannot end the gate. What it raises, and a value that leaves the emulation, are findings that fail;
    AuditFileError and DocumentError say what is wrong with a file.
    """
    return gate_held(held_to(Path(audit)), seed=seed, who=gate_workers(workers))


def gate_workers(number: int) -> Workers:
    """Return the workers of a gate: processes, also where it is one, which a time limit makes sure of."""
    return Workers(number=number, timeout=_LONGEST_BLOCK)


def gate_held(held: Held, *, seed: int | None = None, who: Workers) -> GateEntry:
    """Do what `gate` does for an audit file that was read together with its policy."""
    file = read_audit_file(held.audit)
    policy, stale = held.policy, held.settings.stale
    own = policy.evidence.seed if seed is None else seed
    settings = settings_facts(policy, file.asked())
    if any(one.state == "fails" for one in settings):  # figures of other settings say nothing of these
        return held.entry(settings, None, seed=own)
    arms = {level.level: arms_of(level) for level in policy.levels}
    levels = list(arms)
    findings: list[Finding] = []
    paths = [0] * len(levels)
    for stage in (1, 2):
        used = {arm for both in arms.values() for arm in both}
        smaller = reduced(file, used, policy.cost, held.settings, seed=gate_seed(own, stage), confidence=1 - ALPHA)
        tried = stage == 1 or any(one.check == DOMAIN and one.state == "fails" for one in findings)
        corners = claimed_corners(
            smaller, policy.domain.parameters, arms, quantities=len(policy.target.rmse), least_edge=LEAST_EDGE
        )

        def rule(record: AuditRecord, before: Sequence[Finding] = tuple(findings)) -> Collection[int]:
            return levels_open(concerned(judge(policy, record, stale=stale), before), levels)

        try:
            record = run_audit(
                smaller,
                None,
                workers=who,
                open_levels=rule,
                watched=held.settings.watch,
                corners=corners if tried else None,
            ).record
        except (KernelError, DispatchError) as problem:
            return held.entry([*findings, stopped(problem)], None, seed=own, paths=paths)
        fresh = judge(policy, record, stale=stale, counted=held.settings.watch)
        findings = second(findings, fresh) if findings else fresh
        drawn = next(iter(record.quantities.values())).levels
        paths = [before + level.paths for before, level in zip(paths, drawn, strict=True)]
        if not fails_for_now(findings):
            break
    return held.entry(findings, record, seed=own, paths=paths)
