"""The audit file: what to run, on which ladder, to which error, in which formats, at what cost.

A file is TOML; a mapping of the same shape, made in Python, passes the same checks. Whatever is wrong is one
AuditFileError with the dotted key, what is wrong, and what is accepted.
"""

from __future__ import annotations

import copy
import re
import sys
import tomllib
from collections.abc import Callable, Mapping
from pathlib import Path
from types import FunctionType
from typing import Literal, TypeVar

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
    DrawsTable,
    FormatsTable,
    KernelTable,
    LadderTable,
    LibraryTable,
    SamplingTable,
    Table,
    TableError,
    TargetTable,
    check_run,
    default_layout,
    dotted,
    kind_of,
    shown,
)
from narrowgauge.kernel.branchestable import BranchesTable, filled
from narrowgauge.kernel.givenkeys import CHEAP, check_drawing, check_names, defaults_in_use, document, nearest, useless
from narrowgauge.kernel.ownlimits import check_own
from narrowgauge.kernel.owntables import with_run

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
_Record = TypeVar("_Record", bound=Table)
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
        further = {"draws": self.draws, "branches": self.branches}
        return tables | {name: document(table, without) for name, table in further.items() if table is not None}


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
    library = _table(LibraryTable, raw["library"]) if "library" in raw else None
    command = _table(CommandTable, raw["command"]) if "command" in raw else None
    kernel = raw["kernel"] = with_run(raw["kernel"], library, command)
    if isinstance(kernel, dict) and isinstance(kernel.get("run"), str) and not (function or library or command):
        check_run(kernel["run"])
    audit_file = AuditFile(
        kernel=_table(KernelTable, kernel),
        library=library,
        command=command,
        parameters=parameters,
        ladder=_table(LadderTable, raw["ladder"]),
        target=_table(TargetTable, raw["target"]) if "target" in raw else None,
        formats=_table(FormatsTable, raw.get("formats", {})),
        cost=_cost(raw),
        sampling=_table(SamplingTable, raw.get("sampling", {})),
        source=source,
        folder=folder,
        function=function,
        assumed=defaults_in_use(raw),
        draws=_draws(raw),
    )
    if "branches" in raw:
        table = filled(_table(BranchesTable, raw["branches"]), audit_file)
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
    for name in audit_file.used_formats:
        if getattr(audit_file.cost, name) is None and not audit_file.cost.measured:
            key = f"cost.{name}"
            raise TableError(key, "missing, and the audit uses this format", RULES[key].accepted)
    return audit_file


def _cost(raw: Mapping[str, object]) -> CostTable:
    """Return the costs; without the table those by storage. An approximate draw costs an exact one's unless it says."""
    cost = _table(CostTable, raw["cost"]) if "cost" in raw else CostTable.by_storage()
    if "draws" not in raw or cost.approximate_draws is not None:
        return cost
    return msgspec.structs.replace(cost, approximate_draws=cost.draws)


def _draws(raw: Mapping[str, object]) -> DrawsTable | None:
    """Return the table of approximate draws, tried in the narrow formats unless it says in which; None without one."""
    kernel, cost = raw["kernel"], raw.get("cost")
    if "draws" not in raw:
        if isinstance(cost, dict) and CHEAP in cost:
            raise TableError(f"cost.{CHEAP}", "there are no approximate draws", "no such key, or a table [draws]")
        return None
    draws = _table(DrawsTable, raw["draws"])
    if isinstance(kernel, dict):
        draws.check_takes(kernel.get("takes"))
    if draws.formats:
        return draws
    if isinstance(raw["draws"], dict) and "formats" in raw["draws"]:
        draws.refuse("formats", "the array is empty")
    return msgspec.structs.replace(draws, formats=_table(FormatsTable, raw.get("formats", {})).narrow)


def _table(record: type[_Record], raw: object) -> _Record:
    """Return one table as its record; raise a TableError for an unknown, missing or wrong key."""
    values = raw if isinstance(raw, dict) else {}
    fields, known = msgspec.structs.fields(record), record.__struct_fields__
    for key in values:
        if key not in known:
            raise TableError(dotted(record.table, key), "unknown key" + nearest(key, known), ", ".join(known))
    for field in fields:
        if field.required and field.name not in values:
            key = f"{record.table}.{field.name}"
            raise TableError(key, "missing", RULES[key].accepted)
    try:
        return msgspec.convert(values, record)
    except msgspec.ValidationError as problem:
        if isinstance(problem.__cause__, TableError):
            raise problem.__cause__ from None
        raise _wrong_type(record.table, values, str(problem)) from None


def _wrong_type(table: str, values: dict[str, object], message: str) -> TableError:
    """Return the refusal of a value of the wrong type; the converter's message only tells where it stands."""
    place = re.search(r"at `\$\.(\w+)(?:\[(\d+|\.\.\.)\])?`$", message)
    if place is None:  # its wording is not promised from version to version
        return TableError(table, message, f"a table with keys of {', '.join(TABLES[table].__struct_fields__)}")
    name, inside = place[1], place[2]
    key, value = f"{table}.{name}", values[name]
    accepted = RULES[key].accepted
    if inside and isinstance(value, dict):
        # The converter does not say which key of a free table it was.
        quantity = next(quantity for quantity, number in value.items() if not _is_number(number))
        key, value = dotted(table, name, quantity), value[quantity]
    elif inside and isinstance(value, list):
        key, value = f"{key}[{inside}]", value[int(inside)]
    if message.startswith("Invalid enum value"):
        return TableError(key, f"{shown(value)} is not accepted", accepted)
    if message.startswith("Number out of range"):
        return TableError(key, f"{shown(value)} is beyond float64", accepted)
    return TableError(key, f"{shown(value)} is {kind_of(value)}", accepted)


def _is_number(value: object) -> bool:
    try:
        msgspec.convert(value, float)
    except msgspec.ValidationError:
        return False
    return True


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
