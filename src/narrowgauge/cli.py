"""The command line: draft an audit file, audit, draw up a policy, gate, make a page; the only module that prints.

Exit codes: 0 done; 1 a gate failed; 2 wrong usage, a wrong file, or a kernel that cannot be audited; 3 a gate was
inconclusive; 70 a fault of this program; 130 interrupted; 141 the reader of the output went away. What a command needs
is imported when it runs, so that --help answers at once.
"""

from __future__ import annotations

import argparse
import contextlib
import io
import os
import sys
import threading
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn, TextIO

from narrowgauge import __version__
from narrowgauge.commands import add_gate
from narrowgauge.errors import NarrowgaugeError, said

if TYPE_CHECKING:
    from rich.console import RenderableType

    from narrowgauge.kernel.auditfile import AuditFile
    from narrowgauge.record.audit import AuditRecord

__all__ = ["main"]

_USAGE, _INTERNAL, _INTERRUPTED, _READER_GONE = 2, 70, 130, 141  # the last two are 128 + the signal's number
_LONGEST = 1e6  # seconds, eleven days; the system's clocks do not wait much longer


class _OutputError(NarrowgaugeError):
    """Standard output cannot be written."""


class _UsageError(NarrowgaugeError):
    """Options that do not go together."""


class _ReaderGoneError(Exception):
    """Whatever read standard output has closed it."""


class _Parser(argparse.ArgumentParser):
    """A parser whose refusals look like every other message of the program."""

    def error(self, message: str) -> NoReturn:
        """Leave with exit code 2."""
        _say(f"{message}; {self.prog} --help shows what is accepted")
        raise SystemExit(_USAGE)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command, print what it has to say, and return its exit code."""
    for stream in (sys.stdout, sys.stderr):
        # A terminal that lacks a character gets a question mark, not a traceback.
        if isinstance(stream, io.TextIOWrapper) and not stream.closed:
            stream.reconfigure(errors="replace")
    code = _guarded(arguments)
    if arguments is None:
        _leave_threads(code)
    return code


def _guarded(arguments: Sequence[str] | None) -> int:
    try:
        return _run(arguments)
    except NarrowgaugeError as problem:
        return _refused(problem)
    except KeyboardInterrupt:
        _say("interrupted")
        return _INTERRUPTED
    except _ReaderGoneError:
        _silence(sys.stdout)
        return _READER_GONE
    except BaseException as problem:  # the boundary of the program: exit code 1 would mean that a gate failed
        return _broken(problem)


def _leave_threads(code: int) -> None:
    """End the process at once where the kernel left threads for which Python would wait; all is written by now."""
    if all(thread.daemon for thread in threading.enumerate() if thread is not threading.main_thread()):
        return
    for stream in (sys.stdout, sys.stderr):
        with contextlib.suppress(AttributeError, ValueError, OSError):
            stream.flush()
    os._exit(code)


def _run(arguments: Sequence[str] | None) -> int:
    try:
        options = _parser().parse_args(arguments)
    except SystemExit as leaving:  # after --help, --version or wrong usage
        _write("")
        return int(leaving.code or 0)
    code: int = options.command(options)
    return code


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="narrowgauge",
        description="Measures, level by level, where a Monte Carlo path kernel may run in half or single precision.",
        allow_abbrev=False,
    )
    parser.add_argument("--version", action="version", version=f"narrowgauge {__version__}")
    commands = parser.add_subparsers(title="commands", metavar="COMMAND", required=True, parser_class=_Parser)

    audit = commands.add_parser(
        "audit",
        help="measure a kernel and say where low precision pays",
        description="Measures the kernel that an audit file names, and says on which levels low precision pays.",
        allow_abbrev=False,
    )
    audit.add_argument("file", metavar="AUDIT.toml", help="the audit file; narrowgauge draft makes a first one")
    audit.add_argument("--out", metavar="DIR", help="folder for the results (default: audits/ and the file's name)")
    audit.add_argument(
        "--dry",
        action="store_true",
        help="show what would be rounded, line by line, and what would escape (if anything, exit code 2)",
    )
    present = audit.add_mutually_exclusive_group()
    present.add_argument("--replace", action="store_true", help="overwrite another audit in that folder")
    present.add_argument("--resume", action="store_true", help="go on with an audit that was stopped in that folder")
    who = audit.add_mutually_exclusive_group()
    who.add_argument("--workers", metavar="N", type=_whole, default=1, help="processes that run blocks (default: 1)")
    who.add_argument("--cluster", metavar="ADDRESS", help="run blocks on a dask cluster, such as tcp://host:8786")
    audit.add_argument(
        "--timeout",
        metavar="SECONDS",
        type=_seconds,
        help="time limit of the trial run, of each block, of each look at a scenario and of the study of the lines; a "
        "worker past it is replaced, and what it did is run once more",
    )
    audit.add_argument(
        "--lines", action="store_true", help="find out which lines cost the accuracy, as with a table [lines]"
    )
    audit.add_argument(
        "--quiet", action="store_true", help="no plan, bar and tables, only what is wrong and the verdict"
    )
    audit.set_defaults(command=_audit)

    report = commands.add_parser(
        "report",
        help="make the page of an audit that is done",
        description="Writes an audit as one HTML page that needs no network and no script.",
        allow_abbrev=False,
    )
    report.add_argument("folder", metavar="AUDITDIR", help="the folder that the audit has written")
    report.add_argument("--out", metavar="FILE", help="the page (default: report.html in that folder)")
    report.set_defaults(command=_report)

    draft = commands.add_parser(
        "draft",
        help="write a first audit file for a kernel",
        description="Prints an audit file for a kernel, from its source text alone; nothing of it is run.",
        allow_abbrev=False,
    )
    draft.add_argument("kernel", metavar="FILE.py:FUNCTION", help="the file and the function in it")
    draft.set_defaults(command=_draft)

    policy = commands.add_parser(
        "policy",
        help="draw up the precision policy of an audit, or renew that of an audit file",
        description="Writes what an audit found as a policy, a JSON file that running code can obey. Of an audit file "
        "the audit is run first, anew, and the policy that the file names is renewed.",
        allow_abbrev=False,
    )
    policy.add_argument(
        "folder", metavar="AUDITDIR|AUDIT.toml", help="the folder that an audit has written, or an audit file"
    )
    policy.add_argument(
        "--out",
        metavar="FILE",
        help="where to write it (default: policy.json in that folder, or the file's own policy)",
    )
    policy.add_argument("--workers", metavar="N", type=_whole, default=1, help="processes of the audit (default: 1)")
    policy.add_argument("--c-header", metavar="FILE", help="write the same rules as a C header, too")
    policy.set_defaults(command=_policy)
    add_gate(commands, _whole, _gate)
    return parser


def _whole(text: str) -> int:
    """Return a whole number of 1 or more."""
    if text.isdecimal() and int(text) >= 1:
        return int(text)
    raise argparse.ArgumentTypeError(f"{text!r} is not accepted; accepted: a whole number of 1 or more")


def _seconds(text: str) -> float:
    """Return a finite number above 0."""
    try:
        value = float(text)
    except ValueError:
        value = 0.0
    if 0.0 < value <= _LONGEST:
        return value
    raise argparse.ArgumentTypeError(f"{text!r} is not accepted; accepted: seconds, above 0 and at most {_LONGEST:g}")


def _audit(options: argparse.Namespace) -> int:
    if options.cluster is not None and options.timeout is not None:
        raise _UsageError(
            "--timeout cannot be held on a cluster, whose workers are not this program's to replace; accepted: one of "
            "the two"
        )
    from narrowgauge.kernel.auditfile import read_audit_file

    file = read_audit_file(Path(options.file))
    if options.lines:
        from narrowgauge.kernel.linestable import with_lines

        file = with_lines(file)
    if options.dry:
        return _try_out(file)
    from narrowgauge import api
    from narrowgauge.measure.workers import Workers
    from narrowgauge.report.text import Progress, audit_text, verdict_text

    # A stem of dots alone would lead out of the folder.
    folder = Path(options.out) if options.out is not None else Path("audits", file.stem.strip(".") or "audit")
    place = Path(os.path.abspath(folder))  # a kernel may go to another directory
    workers = Workers(number=options.workers, timeout=options.timeout, cluster=options.cluster)
    with contextlib.nullcontext() if options.quiet else Progress() as watcher:
        done = api.run_audit(
            file, folder, replace=options.replace, resume=options.resume, workers=workers, watcher=watcher, tell=_say
        )
    shown = verdict_text if options.quiet else audit_text
    _show(shown(done.record, done.folder))
    _add_page(done.record, place, folder)
    return 0


def _add_page(record: AuditRecord, place: Path, folder: Path) -> None:
    """Write the page beside the record where the `report` extra is installed; else say if an older one is there."""
    from narrowgauge.report.page import PAGE_FILE, missing_packages

    if not missing_packages():
        _page(record, place / PAGE_FILE, folder / PAGE_FILE)
    elif (place / PAGE_FILE).exists():
        _say(f"{folder / PAGE_FILE}: is of an earlier audit; pip install '.[report]' and narrowgauge report renew it")


def _report(options: argparse.Namespace) -> int:
    from narrowgauge.record.auditreading import audit_in
    from narrowgauge.report.page import PAGE_FILE, need_packages

    need_packages()
    folder = Path(options.folder)
    record = audit_in(folder)
    target = folder / PAGE_FILE if options.out is None else Path(options.out)
    _page(record, target, target)
    return 0


def _page(record: AuditRecord, target: Path, shown: Path) -> None:
    """Write the page, and say where it is."""
    import logging

    from narrowgauge.report.page import write_page
    from narrowgauge.report.wording import clean

    logging.getLogger("matplotlib").setLevel(logging.ERROR)  # that it looks for fonts is nothing to tell
    write_page(record, target, str(shown))
    _write(f"Page to read: {clean(shown)}\n")


def _try_out(file: AuditFile) -> int:
    from narrowgauge import api
    from narrowgauge.report.domain import scenarios_asked
    from narrowgauge.report.text import trial_text

    trial = api.try_out(file)
    _show(trial_text(trial))
    if file.domain is not None:
        _show(scenarios_asked(file))
    escapes = any(fault.kind == "escape" for fault in trial.faults)
    return _USAGE if escapes or not trial.identical else 0


def _draft(options: argparse.Namespace) -> int:
    from narrowgauge.kernel.draft import draft

    _write(draft(options.kernel))
    return 0


def _policy(options: argparse.Namespace) -> int:
    from narrowgauge.policy.drawup import draw_up, read_audit, write_policy
    from narrowgauge.report.policy import policy_lines

    folder, out = Path(options.folder), Path(options.folder, "policy.json")
    if folder.suffix == ".toml":
        from narrowgauge.commands import audited_anew

        folder, out = audited_anew(folder, options.workers, _say)
    out = out if options.out is None else Path(options.out)
    document = draw_up(*read_audit(folder), source=str(folder))
    write_policy(document, out)
    header = None if options.c_header is None else Path(options.c_header)
    if header is not None:
        from narrowgauge.policy.cheader import write_c_header

        write_c_header(document, header)
    _show(policy_lines(document, out, header))
    return 0


def _gate(options: argparse.Namespace) -> int:
    from narrowgauge.commands import gated

    return gated(options, _write)


def _show(document: RenderableType) -> None:
    """Print a document as wide as the terminal, coloured only on a terminal that wants colours."""
    from rich.console import Console

    _write("")  # a console asks a closed stream whether it is a terminal
    console = Console(file=sys.stdout, markup=False, highlight=False, emoji=False)
    # As one string: a console that meets a closed pipe leaves with exit code 1.
    with console.capture() as capture:
        console.print(document)
    _write("".join(f"{line.rstrip()}\n" for line in capture.get().rstrip().split("\n")))


def _write(text: str) -> None:
    try:
        sys.stdout.write(text)
        sys.stdout.flush()
    except BrokenPipeError:
        raise _ReaderGoneError from None
    except OSError as problem:
        _silence(sys.stdout)
        raise _OutputError(f"standard output cannot be written: {problem.strerror}") from None
    except (AttributeError, ValueError):  # there was none when the program began, or the kernel closed it
        raise _OutputError("standard output cannot be written: it is closed") from None


def _silence(stream: TextIO) -> None:
    """Send what is left in a stream nowhere, or Python would fail once more when it ends."""
    nowhere = os.open(os.devnull, os.O_WRONLY)
    with contextlib.suppress(AttributeError, ValueError):  # it is no file
        os.dup2(nowhere, stream.fileno())
    os.close(nowhere)


def _say(message: str) -> None:
    """Print one line on standard error."""
    from narrowgauge.report.wording import clean

    _complain(f"narrowgauge: {clean(message)}\n")


def _complain(text: str) -> None:
    """Write to standard error, if there is one: the exit code says the rest."""
    with contextlib.suppress(AttributeError, ValueError, OSError):
        sys.stderr.write(text)
        sys.stderr.flush()


def _refused(problem: NarrowgaugeError) -> int:
    """Say what is wrong with the input; what the user's own code raised comes with its traceback."""
    cause = problem.__cause__
    if cause is not None and not isinstance(cause, NarrowgaugeError):
        from narrowgauge.kernel.raised import own_traceback
        from narrowgauge.report.wording import clean_lines

        _complain(clean_lines(own_traceback(cause)))
    _say(str(problem))
    return problem.exit_code


def _broken(problem: BaseException) -> int:
    """Say that this program has a fault, with all that is needed to find it."""
    from narrowgauge.kernel.raised import whole_traceback

    _complain(whole_traceback(problem))
    what = f"internal error: {type(problem).__name__}: {said(problem)}"
    _say(f"{what}. This is a fault of narrowgauge; please report it with the traceback above and the audit file")
    return _INTERNAL
