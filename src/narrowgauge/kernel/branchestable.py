"""The table `[branches]` of an audit file: the two functions whose results must cancel to the bit in a split."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, ClassVar, Literal

import msgspec

from narrowgauge.kernel.owntables import OWN_FORMATS
from narrowgauge.kernel.rules import Table, check_run, shown

if TYPE_CHECKING:
    from narrowgauge.kernel.auditfile import AuditFile
    from narrowgauge.kernel.audittables import KernelTable

__all__ = ["BRANCH_MEANINGS", "BRANCH_VALUES", "BranchesTable", "defaults_of", "filled"]

# What a draft says of each key, and the values that it shows for keys without a default.
BRANCH_MEANINGS: dict[str, str] = {
    "branches.low": "no default but kernel.run; file.py:function that computes the many cheap paths",
    "branches.correction": "no default; file.py:function that returns a pair, low and high part",
    "branches.rounds": 'how these functions round; the default is kernel.rounds',
    "branches.library": "shared library of the correction; the default is library.path",
    "branches.symbol": "in place of correction: its name in C, for symbol_NARROW_WIDE",
    "branches.allow": 'no default; "within budget": a mismatch may take what rounding may of [target]',
    "branches.paths": "paths of a level that are compared; the default is sampling.paths",
}
BRANCH_VALUES: dict[str, object] = {
    "branches.correction": "model.py:correction",
    "branches.rounds": "emulated",
    "branches.library": "correction.so",
    "branches.symbol": "correction",
    "branches.allow": "within budget",
    "branches.paths": 32768,
}


class BranchesTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[branches]`: which functions are the low and the correction branch, and what a mismatch may come to.

    Without `low` it is the kernel; without `correction` and `symbol` the kernel is both. `rounds` says how functions
    named here round, `symbol` and `library` name a correction in C. `allow` "within budget" lets a split be used where
    the interval of the mismatch's bias lies inside the level's share of the target. `paths` of each level are compared.
    """

    table: ClassVar[str] = "branches"
    low: str | None = None
    correction: str | None = None
    rounds: Literal["emulated", "itself"] | None = None
    library: str | None = None
    symbol: str | None = None
    allow: Literal["within budget"] | None = None
    paths: int | None = None

    def __post_init__(self) -> None:
        super().__post_init__()
        for key in ("low", "correction"):
            if (run := getattr(self, key)) is not None:
                check_run(run, f"{self.table}.{key}")
        if self.symbol is not None and not (self.symbol.isidentifier() and self.symbol.isascii()):
            self.refuse("symbol", f"{shown(self.symbol)} is not a name in C")
        if self.symbol is not None and self.correction is not None:
            self.refuse("symbol", "branches.correction is there, too", "one of the two")
        if self.library is not None and self.symbol is None:
            self.refuse("library", "there is no branches.symbol to be found in it", "branches.symbol beside it")

    @property
    def named(self) -> bool:
        """Whether there are two functions to compare, not the kernel alone."""
        return any(run is not None for run in (self.low, self.correction, self.symbol))


def filled(table: BranchesTable, file: AuditFile) -> BranchesTable:
    """Return the table with its defaults; raise a TableError for what the rest of the audit file stands against."""
    kernel, formats, library = file.kernel, file.formats, file.library
    if "split" not in formats.schemes:
        table.refuse("low", '"split" is not in formats.schemes, and nothing else has branches', "no [branches]")
    if table.allow is not None and file.target is None:
        table.refuse(
            "allow", "there is no [target], and so no budget for a mismatch", "no such key, or a table [target]"
        )
    if table.rounds is not None and table.low is None and table.correction is None:
        table.refuse("rounds", "[branches] names no function whose rounding it could be", "no such key")
    if table.symbol is not None and library is None:
        table.refuse("symbol", "there is no [library], whose parameters and outputs it has", "branches.correction")
    named = table.low is not None or table.correction is not None
    rounds = table.rounds or kernel.rounds
    if named and rounds == "itself":
        _check_own(table, kernel, (*formats.narrow, *formats.wide))
    symbolic = library is not None and table.symbol is not None
    return msgspec.structs.replace(
        table,
        rounds=rounds if named else None,
        library=(table.library or library.path) if library is not None and symbolic else None,
        paths=table.paths or file.sampling.paths,
    )


def _check_own(table: BranchesTable, kernel: KernelTable, formats: tuple[str, ...]) -> None:
    """Raise a TableError for what functions that round for themselves cannot have."""
    if kernel.takes == "rng":
        table.refuse("rounds", '"itself" with kernel.takes = "rng", whose numbers only the emulation rounds')
    if "paths" not in kernel.layout:
        table.refuse("rounds", '"itself" with a layout that names no paths, though all come in one call')
    for name in formats:
        if name not in OWN_FORMATS:
            table.refuse("rounds", f'"itself", and {shown(name)} has no type of its own, in which to get draws')


def defaults_of(given: Mapping[str, object]) -> tuple[str, ...]:
    """Return the keys of a table [branches] that have a default which counts, given what it holds."""
    return (
        *(("rounds",) if "low" in given or "correction" in given else ()),
        *(("library",) if "symbol" in given else ()),
        "paths",
    )
