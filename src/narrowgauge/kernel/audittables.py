"""The tables of an audit file: one frozen record each; what every key accepts stands in `rules`.

A record refuses a value that is of the right type but out of bounds by raising TableError, however it was
made; `auditfile` reads the types, finds unknown and missing keys, and puts the file's name before all of it.
"""

from __future__ import annotations

import keyword
import re
from typing import ClassVar, Literal

import msgspec

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.kernel.arms import Kind
from narrowgauge.kernel.branchestable import BranchesTable
from narrowgauge.kernel.drawstable import DrawsTable
from narrowgauge.kernel.owntables import CommandTable, LibraryTable
from narrowgauge.kernel.rules import RULES, Table, TableError, check_run, dotted, kind_of, shown

__all__ = [
    "RULES",
    "TABLES",
    "BranchesTable",
    "CommandTable",
    "CostTable",
    "DrawsTable",
    "FormatsTable",
    "KernelTable",
    "LadderTable",
    "LibraryTable",
    "SamplingTable",
    "Table",
    "TableError",
    "TargetTable",
    "axes_of",
    "check_run",
    "default_layout",
    "dotted",
    "kind_of",
    "shown",
]


def default_layout(factors: int) -> str:
    """Return the order of the axes of an array of draws when none is given."""
    return "steps, paths" if factors == 1 else "steps, factors, paths"


def axes_of(layout: str) -> list[str]:
    """Return the names of the axes in the order that a layout has."""
    return [axis.strip() for axis in layout.split(",")]


class KernelTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[kernel]`: the function, what it takes, `factors` draws per step in axis order `layout`.

    A layout without paths says that the kernel takes one path a call. With `coupling` "none" the levels are measured,
    their differences are not. `modules` are copied and rounded along with the kernel's own, `shared` ones are run as
    they are; on the lines of `allow` values may leave the emulation. A kernel that `rounds` "itself" gets its draws in
    the format's own type and is not emulated.
    """

    table: ClassVar[str] = "kernel"
    run: str
    takes: Literal["increments", "normals", "uniforms", "rng"]
    factors: int = 1
    layout: str = ""
    coupling: Literal["sum", "none"] = "sum"
    modules: tuple[str, ...] = ()
    shared: tuple[str, ...] = ()
    allow: tuple[str, ...] = ()
    rounds: Literal["emulated", "itself"] = "emulated"

    def __post_init__(self) -> None:
        super().__post_init__()
        default = default_layout(self.factors)
        axes = axes_of(self.layout or default)
        # With one factor its axis may be there, of length one, or not; without paths the kernel takes one a call.
        whole = axes if "paths" in axes else [*axes, "paths"]
        if sorted(whole) not in (sorted(default.split(", ")), ["factors", "paths", "steps"]):
            draws = "one draw a step" if self.factors == 1 else f"{self.factors} draws a step"
            self.refuse(
                "layout",
                f"{shown(self.layout)} does not name each axis of {draws} once",
                f'"{default}", or the same names in another order, without paths where the kernel takes one a call',
            )
        msgspec.structs.force_setattr(self, "layout", ", ".join(axes))
        for key in ("modules", "shared"):
            self._check_names(key)
        for entry in self.allow:
            if not re.fullmatch(r".+:[1-9][0-9]{0,8}", entry):
                self.refuse("allow", f'{shown(entry)} does not end in ":" and the number of a line')
            if self.allow.count(entry) > 1:
                self.refuse("allow", f"{shown(entry)} stands more than once")

    def _check_names(self, key: str) -> None:
        """Refuse a name that is no module's, stands more than once, or lies in a package that is shared."""
        for name in getattr(self, key):
            if not all(part.isidentifier() and not keyword.iskeyword(part) for part in name.split(".")):
                self.refuse(key, f"{shown(name)} is not the name of a module")
            if (self.modules + self.shared).count(name) > 1:
                self.refuse(key, f"{shown(name)} stands more than once")
            above = next((outer for outer in self.shared if name.startswith(f"{outer}.")), None)
            if key == "modules" and above is not None:
                self.refuse(key, f"{shown(name)} lies in {shown(above)}, which is shared")


class LadderTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[ladder]`: levels 0 to `finest`; level l has coarsest_steps x refinement^l steps over `horizon`."""

    table: ClassVar[str] = "ladder"
    horizon: float
    coarsest_steps: int = 1
    refinement: int = 2
    finest: int

    @property
    def levels(self) -> range:
        """The levels, coarsest first."""
        return range(self.finest + 1)

    def steps(self, level: int) -> int:
        """Return n_l, the number of steps of a path on this level."""
        return self.coarsest_steps * int(self.refinement**level)

    def step_size(self, level: int) -> float:
        """Return h_l = horizon / n_l, in the unit of the horizon."""
        return self.horizon / self.steps(level)

    def finest_within(self, most_steps: int) -> int:
        """Return the finest level of at most `most_steps` steps, -1 if level 0 has more already."""
        level, steps = -1, self.coarsest_steps
        while steps <= most_steps:
            level, steps = level + 1, steps * self.refinement
        return level

    def level_within(self, most_steps: int) -> int:
        """Return the finest level of this ladder of at most `most_steps` steps, the coarsest if it has none."""
        return max(0, min(self.finest, self.finest_within(most_steps)))


class TargetTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[target]`: the root mean square error asked for, and what rounding may take of it.

    `rmse` and `largest_correction` (a declared bound on |P^wide - P^narrow| in a level's correction) are in
    the unit of the quantity.
    """

    table: ClassVar[str] = "target"
    rmse: float | dict[str, float]
    bias_share: float = 0.25
    worthwhile: float = 1.05
    largest_correction: float | dict[str, float] | None = None


class FormatsTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[formats]`: what runs today, what is tried, what may be the wide half of a split."""

    table: ClassVar[str] = "formats"
    today: str = "float64"
    narrow: tuple[str, ...] = ("float16", "bfloat16", "float32")
    wide: tuple[str, ...] = ("float32", "float64")
    schemes: tuple[Literal["alone", "split"], ...] = ("alone", "split")

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.today not in FORMATS:
            self.refuse("today", f"{shown(self.today)} is not a format")
        for key, names in (("narrow", self.narrow), ("wide", self.wide), ("schemes", self.schemes)):
            for name in names:
                if key != "schemes" and name not in FORMATS:
                    self.refuse(key, f"{shown(name)} is not a format")
                if names.count(name) > 1:
                    self.refuse(key, f"{shown(name)} stands more than once")
            if not names and key != "wide":
                self.refuse(key, "the array is empty")
        if "float64" in self.narrow:
            self.refuse("narrow", '"float64" is the reference and cannot be a narrow format')


class CostTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[cost]`: relative costs of one step in each format, of one draw, and of a path whatever its steps.

    An approximate draw costs as much as an exact one unless `approximate_draws` says otherwise. `measured`: those of a
    step come from the times of a kernel that rounds for itself, float64 being 1.
    """

    table: ClassVar[str] = "cost"
    float64: float | None = None
    float32: float | None = None
    float16: float | None = None
    bfloat16: float | None = None
    tf32: float | None = None
    e4m3: float | None = None
    e5m2: float | None = None
    draws: float = 0.0
    approximate_draws: float | None = None
    path: float = 0.0
    measured: bool = False

    @classmethod
    def by_storage(cls) -> CostTable:
        """Return the costs that stand in for a table that is not there: storage bits / 64."""
        return msgspec.convert({name: row.bits / 64 for name, row in FORMATS.items()}, cls)

    def step(self, name: str) -> float:
        """Return the cost of one step of one path in the format of that name; a KeyError if there is none."""
        cost: float | None = getattr(self, name) if name in FORMATS else None
        if cost is None:
            raise KeyError(name)
        return cost

    def draw(self, kind: Kind) -> float:
        """Return the cost of one draw of a kind."""
        return self.draws if kind == "exact" or self.approximate_draws is None else self.approximate_draws


class SamplingTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[sampling]`: paths of a block, of a level's first and last look, confidence and seed."""

    table: ClassVar[str] = "sampling"
    block: int = 32768
    paths: int = 32768
    most_paths: int = 1048576
    confidence: float = 0.99
    seed: int = 1

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.block % 1024:
            self.refuse("block", f"{self.block} is not a multiple of 1024")
        if self.most_paths < self.paths:
            self.refuse(
                "most_paths",
                f"{self.most_paths} is below sampling.paths",
                f"an integer of {self.paths} or more",
            )


# In the order of the file; `parameters` is a free table and has no record.
TABLES: dict[str, type[Table]] = {
    table.table: table
    for table in (
        KernelTable,
        LibraryTable,
        CommandTable,
        LadderTable,
        TargetTable,
        FormatsTable,
        DrawsTable,
        BranchesTable,
        CostTable,
        SamplingTable,
    )
}
