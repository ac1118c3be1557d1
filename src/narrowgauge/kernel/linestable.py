"""The table `[lines]` of an audit file: that the audit shall find out which lines cost the accuracy."""

from __future__ import annotations

from typing import TYPE_CHECKING, ClassVar

from msgspec.structs import replace

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.rules import Table, TableError, shown

if TYPE_CHECKING:
    from narrowgauge.kernel.auditfile import AuditFile

__all__ = ["LinesTable", "lines_draft", "with_lines"]

PATHS = 16384


class LinesTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[lines]`: narrow `formats` whose lines are studied, on a `level`, with so many `paths` a run.

    Without `formats` they are the narrow ones that stop paying on the ladder, without `level` it is the first on which
    the format does not pay. With `search` sets of lines are kept in the `wide` format, which is the least precise of
    formats.wide above the narrow one unless it is given, to see how much further the format then pays; with `what_ifs`
    other ways to round are judged, too.
    """

    table: ClassVar[str] = "lines"
    formats: tuple[str, ...] = ()
    level: int | None = None
    paths: int = PATHS
    search: bool = True
    what_ifs: bool = False
    wide: str | None = None

    def __post_init__(self) -> None:
        super().__post_init__()
        for name in self.formats:
            if name not in FORMATS:
                self.refuse("formats", f"{shown(name)} is not a format")
            if self.formats.count(name) > 1:
                self.refuse("formats", f"{shown(name)} stands more than once")
        if self.wide is not None and self.wide not in FORMATS:
            self.refuse("wide", f"{shown(self.wide)} is not a format")

    def check(self, rounds: str, narrow: tuple[str, ...], finest: int) -> None:
        """Raise a TableError for what does not go with the rest of an audit file."""
        if rounds == "itself":
            why = 'with rounds = "itself" the audit does not see the lines of the kernel'
            raise TableError("lines", why, "no such table, or a kernel that is emulated")
        for name in self.formats:
            if name not in narrow:
                self.refuse("formats", f"{shown(name)} is not among formats.narrow", ", ".join(narrow))
            if self.wide is not None and FORMATS[self.wide].precision <= FORMATS[name].precision:
                self.refuse("wide", f"{shown(self.wide)} is not more precise than {shown(name)}")
        if self.level is not None and self.level > finest:
            self.refuse("level", f"{self.level} is beyond ladder.finest", f"an integer from 0 to {finest}")


def with_lines(file: AuditFile) -> AuditFile:
    """Return an audit file with this table, empty unless it is there; raises AuditFileError where it cannot be."""
    if file.lines is not None:
        return file
    table = LinesTable()
    try:
        table.check(file.kernel.rounds, file.formats.narrow, file.ladder.finest)
    except TableError as problem:
        raise AuditFileError(file.source, problem.key, problem.problem, problem.accepted) from None
    return replace(file, lines=table, assumed=(*file.assumed, "lines.paths", "lines.search", "lines.what_ifs"))


def lines_draft() -> list[str]:
    """Return the table as comments of a draft."""
    return [
        "",
        "# [lines]",
        '# formats = ["float16"]  # the default: those of formats.narrow that stop paying on the ladder',
        "# level = 0  # where lines are studied; the default: the first level on which the format does not pay",
        f"# paths = {PATHS}  # of each run of the study",
        "# search = true  # look for the few lines that, kept in a wider format, make the format pay further",
        "# what_ifs = false  # try stochastic rounding, fused products, carried errors and the like in its place",
        '# wide = "float32"  # that format; the default: the least precise of formats.wide above the narrow one',
    ]
