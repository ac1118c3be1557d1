"""What the command gate takes and does, and how a policy is renewed; `cli` prints, heavy modules are imported late."""

from __future__ import annotations

import argparse
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

from narrowgauge import __version__

__all__ = ["add_gate", "audited_anew", "gated"]


def add_gate(commands: Any, whole: Callable[[str], int], run: Callable[[argparse.Namespace], int]) -> None:
    """Add the command gate to the parsers of the commands."""
    gate = commands.add_parser(
        "gate",
        help="fail where a kernel no longer supports its policy",
        description="Measures kernels afresh and says whether their policies still hold. Exit codes: 0 all pass, 1 one "
        "fails, 3 one is inconclusive and none fails, 2 wrong usage or a wrong file.",
        allow_abbrev=False,
    )
    gate.add_argument(
        "files",
        metavar="AUDIT.toml",
        nargs="*",
        help="audit files (default: those of [tool.narrowgauge] in pyproject.toml)",
    )
    gate.add_argument(
        "--seed", metavar="N", type=_seed, help="other draws (default: they follow from the policy's seed)"
    )
    gate.add_argument("--workers", metavar="N", type=whole, default=2, help="processes that run blocks (default: 2)")
    gate.add_argument("--measured", metavar="AUDITDIR", help="judge this finished audit of the one audit file")
    gate.add_argument("--junit", metavar="FILE", help="write a testcase for each level and check, as JUnit XML")
    gate.add_argument("--sarif", metavar="FILE", help="write what does not hold, at the kernel's lines, as SARIF 2.1.0")
    gate.add_argument(
        "--summary",
        metavar="FILE",
        nargs="?",
        const="",
        help="write a page in Markdown; without FILE append it to the one that GITHUB_STEP_SUMMARY names, where a "
        "hosting service sets it",
    )
    gate.add_argument("--json", metavar="FILE", help="write every figure, as canonical JSON")
    gate.set_defaults(command=run)


def gated(options: argparse.Namespace, show: Callable[[str], None]) -> int:
    """Hold a gate, show what a person reads of it, write the files that were asked for, and return the exit code.

    All files are read before anything is measured, so that what is wrong with one is said at once.
    """
    from narrowgauge.errors import AuditFileError
    from narrowgauge.policy.gatefile import audit_files, held_to
    from narrowgauge.policy.gatefinished import judge_finished
    from narrowgauge.policy.gateoutputs import GateFiles
    from narrowgauge.record.gate import report_of
    from narrowgauge.report.gate import gate_lines

    files = audit_files(options.files)
    if options.measured is not None and (len(files) > 1 or options.seed is not None):
        raise AuditFileError("gate", "", "--measured judges one audit that is there", "one AUDIT.toml, and no --seed")
    held = [held_to(path) for path in files]
    asked = {form: getattr(options, form) for form in ("junit", "sarif", "summary", "json")}
    outputs = GateFiles.of(asked, [path for one in held for path in (one.audit, one.settings.policy)])
    if options.measured is not None:
        entries = [judge_finished(held[0], Path(options.measured))]
    else:
        from narrowgauge.api import gate_held, gate_workers

        entries = [gate_held(one, seed=options.seed, who=gate_workers(options.workers)) for one in held]
    report = report_of(entries, f"narrowgauge {__version__}")
    try:
        show(gate_lines(report, shutil.get_terminal_size((100, 24)).columns))
    finally:  # whether or not anybody reads the table
        outputs.write(report)
    return report.exit_code


def audited_anew(path: Path, workers: int, tell: Callable[[str], None]) -> tuple[Path, Path]:
    """Run the audit of a file into its usual folder, over what was there; return the folder and the file's policy."""
    from narrowgauge.api import run_audit
    from narrowgauge.kernel.auditfile import read_audit_file
    from narrowgauge.kernel.gatetable import gate_settings
    from narrowgauge.measure.workers import Workers
    from narrowgauge.report.text import Progress

    file, policy = read_audit_file(path), gate_settings(path).policy
    folder = Path("audits", file.stem.strip(".") or "audit")
    with Progress() as watcher:
        run_audit(file, folder, replace=True, workers=Workers(number=workers), watcher=watcher, tell=tell)
    return folder, policy


def _seed(text: str) -> int:
    """Return a whole number from 0 to 2^63 - 1."""
    if text.isdecimal() and int(text) < 2**63:
        return int(text)
    raise argparse.ArgumentTypeError(f"{text!r} is not accepted; accepted: a whole number from 0 to {2**63 - 1}")
