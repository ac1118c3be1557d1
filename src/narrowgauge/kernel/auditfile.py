"""The audit file: what to run, on which ladder, to which error, in which formats, at what cost.

A file is TOML; a mapping of the same shape, made in Python, passes the same checks. Whatever is wrong is one
AuditFileError with the dotted key, what is wrong, and what is accepted.
"""

from __future__ import annotations

import copy
import sys
import tomllib
from collections.abc import Callable, Mapping
from pathlib import Path
from types import FunctionType
from typing import Literal

import msgspec

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditparameters import check_parameter, passed, plain
from narrowgauge.kernel.audittables import (
    RULES,
    TABLES,
    CommandTable,
    CostTable,
    DomainTable,
    DrawsTable,
    FormatsTable,
    KernelTable,
    LadderTable,
    LibraryTable,
    LinesTable,
    SamplingTable,
    Table,
    TableError,
    TargetTable,
    check_run,
    default_layout,
    kind_of,
    shown,
)
from narrowgauge.kernel.branchestable import BranchesTable, filled
from narrowgauge.kernel.domaintable import checked_box
from narrowgauge.kernel.givenkeys import check_drawing, check_names, defaults_in_use, document, useless
from narrowgauge.kernel.ownlimits import check_own
from narrowgauge.kernel.owntables import with_run
from narrowgauge.kernel.readtable import costs_of, draws_of, table_of

__all__ = [
    "AuditFile",
    "CostTable",
    "KernelTable",
    "LadderTable",
    "audit_file_from",
    "bytes_of",
    "most_steps",
    "read_audit_file",
    "with_draws",
]

_BLOCK_DRAWS, _SMALLEST_BLOCK = 2**22, 1024
_WORTHWHILE: float = TargetTable(rmse=1.0).worthwhile


class AuditFile(msgspec.Struct, frozen=True, kw_only=True):
    """One audit, with every default filled in.

    `source` is what messages call it, `folder` what paths are relative to, `function` the function that a
    mapping held at kernel.run, `assumed` the dotted key of every default that was used, in order of the file.
    """

    kernel: KernelTable
    library: LibraryTable | None = None
    command: CommandTable | None = None
    parameters: Mapping[str, object]
    ladder: LadderTable
    target: TargetTable | None
    formats: FormatsTable
    cost: CostTable
    sampling: SamplingTable
    source: str
    folder: Path
    function: Callable[..., object] | None
    assumed: tuple[str, ...]
    draws: DrawsTable | None = None
    domain: DomainTable | None = None
    lines: LinesTable | None = None
    timed: CostTable | None = None
    branches: BranchesTable | None = None

    @property
    def costs(self) -> CostTable:
        """The costs to judge by: those of the file, or once they are measured, the measured ones in `timed`."""
        return self.timed or self.cost

    @property
    def used_formats(self) -> tuple[str, ...]:
        """The formats that are needed, least precise first: narrow, wide, today's, the reference, and of [draws]."""
        needed = {*self.formats.narrow, *self.formats.wide, self.formats.today, "float64"}
        needed |= set(self.draws.formats if self.draws else ())
        return tuple(sorted((name for name in FORMATS if name in needed), key=_precision))

    @property
    def arms(self) -> tuple[str, ...]:
        """The names of all arms; with approximate draws those of float64 too, which show what draws alone do."""
        if self.draws is None:
            return self.used_formats
        cheap = [name for name in self.used_formats if name in {*self.draws.formats, "float64"}]
        return (*self.used_formats, *(Arm(name, "approximate").name for name in cheap))

    @property
    def narrow(self) -> tuple[str, ...]:
        """The names of the arms that are judged: the narrow formats, then those with approximate draws."""
        cheap = self.draws.formats if self.draws else ()
        return (*self.formats.narrow, *(Arm(name, "approximate").name for name in cheap))

    @property
    def foreign(self) -> bool:
        """Whether the kernel is a library or a command, which a process of its own has to run."""
        return self.library is not None or self.command is not None

    @property
    def stem(self) -> str:
        """The file's name without its ending; names the folder of the results."""
        return Path(self.source).stem or "audit"

    @property
    def worthwhile(self) -> float:
        """The edge (a ratio of costs) below which a format is not worth having, with a target or without."""
        return _WORTHWHILE if self.target is None else self.target.worthwhile

    def shown(self, file: str) -> str:
        """Return a source file's path as a record has it: from the audit file's folder or from where it is imported.

        A record must not differ between two checkouts of the same audit.
        """
        path = Path(file).resolve()
        for base in (self.folder, *map(Path, sys.path)):
            if path.is_relative_to(base.resolve()):
                return path.relative_to(base.resolve()).as_posix()
        return path.name

    def coupled(self, level: int) -> bool:
        """Whether a level is a difference of a fine and a coarse path on the same draws."""
        return level > 0 and self.kernel.coupling == "sum"

    def keywords(self) -> dict[str, object]:
        """Return the parameters as a kernel gets them; arrays of numbers are new float64 arrays each call."""
        return {name: passed(value) for name, value in self.parameters.items()}

    def asked(self) -> dict[str, object]:
        """Return the file as a plain document with every default filled in; an absent target is None.

        Other tables are there where the file has them, and keys that count only with one of them, or only with a kernel
        that rounds for itself, where they count.
        """
        without = useless(own=self.kernel.rounds == "itself", draws=self.draws is not None)
        tables: dict[str, object] = {}
        for name in ("kernel", "library", "command", "parameters", "ladder", "target", "formats", "cost", "sampling"):
            table = getattr(self, name)
            if isinstance(table, Table):
                tables[name] = document(table, without)
            elif name in ("parameters", "target"):
                tables[name] = copy.deepcopy(table)
        tables["assumed"] = list(self.assumed)
        rest = (self.draws, self.branches, self.domain, self.lines)
        return tables | {one.table: document(one, without) for one in rest if one is not None}


def read_audit_file(path: Path) -> AuditFile:
    """Read and check an audit file; AuditFileError says what is wrong, and where."""
    source = str(path)
    data = bytes_of(path, "TOML")
    try:
        text = data.decode("utf-8-sig")  # some editors put a byte order mark before UTF-8
    except UnicodeDecodeError as problem:
        line = data.count(b"\n", 0, problem.start) + 1
        what = f"line {line} is not UTF-8 (byte 0x{data[problem.start]:02x})"
        raise AuditFileError(source, "", what, "TOML in UTF-8") from None
    try:
        raw = tomllib.loads(text)
    except RecursionError:
        raise AuditFileError(source, "", "arrays or tables are nested too deeply", "TOML in UTF-8") from None
    except ValueError as problem:  # TOMLDecodeError, or an integer with more digits than Python converts
        raise AuditFileError(source, "", f"this is not TOML: {problem}", "TOML in UTF-8") from None
    return _checked(raw, source, Path(path).absolute().parent, None)


def bytes_of(path: Path, language: str) -> bytes:
    """Return what a file holds; AuditFileError says why it cannot be read, and what it should be."""
    source, accepted = str(path), f"the path of a {language} file"
    try:
        return Path(path).read_bytes()
    except FileNotFoundError:
        raise AuditFileError(source, "", "there is no such file", accepted) from None
    except IsADirectoryError:
        raise AuditFileError(source, "", "this is a folder", accepted) from None
    except OSError as problem:
        reason = problem.strerror or str(problem)
        raise AuditFileError(source, "", f"cannot be read ({reason})", accepted) from None


def audit_file_from(mapping: Mapping[str, object], source: str = "audit") -> AuditFile:
    """Check a mapping in the shape of an audit file; kernel.run may be a function.

    A key of a table whose value is None counts as not given, tuples and NumPy's arrays and scalars count as
    the arrays and numbers of TOML. Paths are relative to the current folder. Raises AuditFileError.
    """
    try:
        tables = plain(mapping)
    except TableError as problem:
        raise AuditFileError(source, problem.key, problem.problem, problem.accepted) from None
    if not isinstance(tables, dict):
        raise AuditFileError(source, "", f"{shown(tables)} is {kind_of(tables)}", "a mapping of tables")
    raw: dict[str, object] = {}
    for name, table in tables.items():
        if name in TABLES and isinstance(table, dict):
            raw[name] = {key: value for key, value in table.items() if value is not None}
        elif table is not None:
            raw[name] = table
    function = None
    kernel = raw.get("kernel")
    if isinstance(kernel, dict) and callable(kernel.get("run")):
        function = kernel["run"]
        if not isinstance(function, FunctionType):
            what = f"a {type(function).__name__} cannot be copied into another arithmetic"
            raise AuditFileError(source, "kernel.run", what, "a function defined with def, or file.py:function")
        name = getattr(function, "__qualname__", type(function).__qualname__)
        kernel["run"] = f"{getattr(function, '__module__', None) or type(function).__module__}:{name}"
    return _checked(raw, source, Path.cwd(), function)


def with_draws(file: AuditFile, factors: int, coupling: Literal["sum", "none"]) -> AuditFile:
    """Return the audit file of a kernel that draws for itself, with what its requests show filled in.

    Raises AuditFileError where a block of the finest level does not fit so many draws.
    """
    kernel = msgspec.structs.replace(file.kernel, factors=factors, layout=default_layout(factors), coupling=coupling)
    try:
        _check_ladder(kernel, file.ladder)
    except TableError as problem:
        raise AuditFileError(file.source, problem.key, problem.problem, problem.accepted) from None
    return msgspec.structs.replace(file, kernel=kernel)


def most_steps(factors: int) -> int:
    """Return the most steps of a level: the smallest block, 1,024 paths, must fit 2^22 draws."""
    return _BLOCK_DRAWS // _SMALLEST_BLOCK // factors


def _precision(name: str) -> int:
    return FORMATS[name].precision


def _checked(raw: dict[str, object], source: str, folder: Path, function: Callable[..., object] | None) -> AuditFile:
    """Return the audit file of a plain mapping; every refusal leaves as an AuditFileError."""
    try:
        return _assembled(raw, source, folder, function)
    except TableError as problem:
        raise AuditFileError(source, problem.key, problem.problem, problem.accepted) from None


def _assembled(raw: dict[str, object], source: str, folder: Path, function: Callable[..., object] | None) -> AuditFile:
    check_names(raw)
    check_drawing(raw["kernel"])
    parameters = raw.get("parameters", {})
    if not isinstance(parameters, dict):
        raise TableError("parameters", f"{shown(parameters)} is {kind_of(parameters)}", "a table")
    for name, value in parameters.items():
        check_parameter(name, value)
    library = table_of(LibraryTable, raw["library"]) if "library" in raw else None
    command = table_of(CommandTable, raw["command"]) if "command" in raw else None
    kernel = raw["kernel"] = with_run(raw["kernel"], library, command)
    if isinstance(kernel, dict) and isinstance(kernel.get("run"), str) and not (function or library or command):
        check_run(kernel["run"])
    audit_file = AuditFile(
        kernel=table_of(KernelTable, kernel),
        library=library,
        command=command,
        parameters=parameters,
        ladder=table_of(LadderTable, raw["ladder"]),
        target=table_of(TargetTable, raw["target"]) if "target" in raw else None,
        formats=table_of(FormatsTable, raw.get("formats", {})),
        cost=costs_of(raw),
        sampling=table_of(SamplingTable, raw.get("sampling", {})),
        source=source,
        folder=folder,
        function=function,
        assumed=defaults_in_use(raw),
        draws=draws_of(raw),
        domain=table_of(DomainTable, checked_box(raw)) if "domain" in raw else None,
        lines=table_of(LinesTable, raw["lines"]) if "lines" in raw else None,
    )
    if "branches" in raw:
        table = filled(table_of(BranchesTable, raw["branches"]), audit_file)
        audit_file = msgspec.structs.replace(audit_file, branches=table)
    check_own(
        audit_file.kernel,
        formats=audit_file.formats,
        cost=audit_file.cost,
        draws=audit_file.draws,
        parameters=parameters,
        library=library,
        command=command,
    )
    _check_ladder(audit_file.kernel, audit_file.ladder)
    if audit_file.lines is not None:
        audit_file.lines.check(audit_file.kernel.rounds, audit_file.formats.narrow, audit_file.ladder.finest)
    for name in audit_file.used_formats:
        if getattr(audit_file.cost, name) is None and not audit_file.cost.measured:
            key = f"cost.{name}"
            raise TableError(key, "missing, and the audit uses this format", RULES[key].accepted)
    return audit_file


def _check_ladder(kernel: KernelTable, ladder: LadderTable) -> None:
    """Raise a TableError unless the smallest block fits its draws on the finest level."""
    most = most_steps(kernel.factors)
    fits = ladder.finest_within(most)
    if ladder.finest <= fits:
        return
    draws = "one draw a step" if kernel.factors == 1 else f"{kernel.factors} draws a step"
    why = f"with {draws} a level may have {most} steps, for a block of 1024 paths to fit 2^22 draws"
    if not most:
        limit = f"an integer from 1 to {most_steps(1)}"
        why = f"{kernel.factors} is not accepted, a block of 1024 paths must fit 2^22 draws"
        raise TableError("kernel.factors", why, limit)
    if fits < 0:
        problem = f"{ladder.coarsest_steps} is not accepted, {why}"
        raise TableError("ladder.coarsest_steps", problem, f"an integer from 1 to {most}")
    raise TableError("ladder.finest", f"{shown(ladder.finest)} is too fine, {why}", f"an integer from 0 to {fits}")
