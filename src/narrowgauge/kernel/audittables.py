"""The tables of an audit file: one frozen record each, with what every key accepts as rows.

A record refuses a value that is of the right type but out of bounds by raising TableError, however it was
made; `auditfile` reads the types, finds unknown and missing keys, and puts the file's name before all of it.
"""

from __future__ import annotations

import json
import keyword
import math
import re
from dataclasses import dataclass
from datetime import date, time
from typing import ClassVar, Literal, NoReturn

import msgspec

from narrowgauge.arithmetic.formats import FORMATS

__all__ = [
    "RULES",
    "TABLES",
    "CostTable",
    "FormatsTable",
    "KernelTable",
    "LadderTable",
    "Rule",
    "SamplingTable",
    "Table",
    "TableError",
    "TargetTable",
    "check_run",
    "default_layout",
    "dotted",
    "kind_of",
    "shown",
]

NARROW_FORMATS = tuple(name for name in FORMATS if name != "float64")


class TableError(ValueError):
    """A value is not accepted: `key` is the dotted path below the file, the rest the words of the message."""

    def __init__(self, key: str, problem: str, accepted: str) -> None:
        self.key, self.problem, self.accepted = key, problem, accepted
        super().__init__(f"{key}: {problem}; accepted: {accepted}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Rule:
    """What one key accepts: the words of it, and bounds for a number (an open bound is itself refused)."""

    accepted: str
    low: float = -math.inf
    high: float = math.inf
    open_low: bool = False
    open_high: bool = False

    def problem_of(self, value: float) -> str | None:
        """Return what is wrong with a number, or None if it is accepted."""
        if isinstance(value, float) and not math.isfinite(value):
            return f"{shown(value)} is not finite"
        below = value < self.low or (self.open_low and value == self.low)
        above = value > self.high or (self.open_high and value == self.high)
        if below and value < 0 <= self.low:
            return f"{shown(value)} is negative"
        return f"{shown(value)} is not accepted" if below or above else None


_POSITIVE = Rule(accepted="a finite number above 0", low=0.0, open_low=True)
_NOT_NEGATIVE = Rule(accepted="a finite number of 0 or more", low=0.0)
_BY_QUANTITY = "a finite number above 0, or a table of such numbers by quantity"

RULES: dict[str, Rule] = {
    "kernel.run": Rule(accepted='"file.py:function" or "package.module:function"'),
    "kernel.takes": Rule(accepted='"increments", "normals", "uniforms" or "rng"'),
    "kernel.factors": Rule(accepted="an integer of 1 or more", low=1),
    "kernel.layout": Rule(
        accepted='the axis names in any order, such as "steps, factors, paths"; no paths: one a call'
    ),
    "kernel.coupling": Rule(accepted='"sum" or "none"'),
    "kernel.modules": Rule(accepted='an array of names such as "package.module", each once'),
    "kernel.shared": Rule(accepted="names of modules that do not stand in kernel.modules, each once"),
    "kernel.allow": Rule(accepted='an array of lines such as "model.py:41", each once'),
    "kernel.rounds": Rule(accepted='"emulated" or "itself"'),
    "ladder.horizon": _POSITIVE,
    "ladder.coarsest_steps": Rule(accepted="an integer of 1 or more", low=1),
    "ladder.refinement": Rule(accepted="an integer of 2 or more", low=2),
    "ladder.finest": Rule(accepted="an integer of 0 or more", low=0),
    "target.rmse": Rule(accepted=_BY_QUANTITY, low=0.0, open_low=True),
    "target.bias_share": Rule(
        accepted="a number between 0 and 1, both excluded", low=0.0, high=1.0, open_low=True, open_high=True
    ),
    "target.worthwhile": Rule(accepted="a finite number of 1 or more", low=1.0),
    "target.largest_correction": Rule(accepted=_BY_QUANTITY, low=0.0, open_low=True),
    "formats.today": Rule(accepted=", ".join(FORMATS)),
    "formats.narrow": Rule(accepted=f"an array of one or more of {', '.join(NARROW_FORMATS)}"),
    "formats.wide": Rule(accepted=f"an array of {', '.join(FORMATS)}"),
    "formats.schemes": Rule(accepted='an array of one or both of "alone", "split"'),
    "cost.float64": _POSITIVE,
    "cost.float32": _POSITIVE,
    "cost.float16": _POSITIVE,
    "cost.bfloat16": _POSITIVE,
    "cost.tf32": _POSITIVE,
    "cost.e4m3": _POSITIVE,
    "cost.e5m2": _POSITIVE,
    "cost.draws": _NOT_NEGATIVE,
    "cost.path": _NOT_NEGATIVE,
    "cost.measured": Rule(accepted="a boolean"),
    "sampling.block": Rule(accepted="a multiple of 1024, at least 1024", low=1024),
    "sampling.paths": Rule(accepted="an integer of 1 or more", low=1),
    "sampling.most_paths": Rule(accepted="an integer of sampling.paths or more", low=1),
    "sampling.confidence": Rule(
        accepted="a number between 0.5 and 1, both excluded", low=0.5, high=1.0, open_low=True, open_high=True
    ),
    "sampling.seed": Rule(accepted=f"an integer from 0 to {2**63 - 1}", low=0, high=2**63 - 1),
}

_KINDS: tuple[tuple[type | tuple[type, ...], str], ...] = (
    (bool, "a boolean"),  # before int, of which Python makes it a subclass
    (int, "an integer"),
    (float, "a floating-point number"),
    (str, "a string"),
    ((list, tuple), "an array"),
    (dict, "a table"),
    ((date, time), "a date or time"),
)


def kind_of(value: object) -> str:
    """Return the word for the type of a value, as TOML calls it; other Python types by their own name."""
    for types, word in _KINDS:
        if isinstance(value, types):
            return word
    return f"of type {type(value).__name__}"


def shown(value: object) -> str:
    """Return a value as a message shows it, as TOML would write it, cut at 60 characters."""
    if isinstance(value, bool):
        text = "true" if value else "false"
    elif isinstance(value, str):
        text = json.dumps(value, ensure_ascii=False)
    elif isinstance(value, date | time):
        text = value.isoformat()
    elif isinstance(value, int) and abs(value) >= 10**60:
        # str() of an integer past 4,300 digits raises, and nobody reads 60 of them.
        return "an integer of more than 60 digits"
    elif isinstance(value, int | float):
        text = repr(value)
    else:
        return "this"
    return text if len(text) <= 60 else text[:57] + "..."


def dotted(*names: str) -> str:
    """Return names as a dotted TOML key, quoting a name that is not a bare key."""
    bare = re.compile(r"[A-Za-z0-9_-]+")
    return ".".join(name if bare.fullmatch(name) else json.dumps(name, ensure_ascii=False) for name in names)


class Table(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Base of the tables: every number is held against the row of its key."""

    table: ClassVar[str] = ""
    rules: ClassVar[dict[str, Rule]] = RULES

    def __post_init__(self) -> None:
        for name in self.__struct_fields__:
            rule, value = self.rules[f"{self.table}.{name}"], getattr(self, name)
            numbers = value if isinstance(value, dict) else {"": value}
            if not numbers:
                raise TableError(f"{self.table}.{name}", "the table is empty", rule.accepted)
            for quantity, number in numbers.items():
                problem = rule.problem_of(number) if isinstance(number, int | float) else None
                if problem:
                    below = (quantity,) if isinstance(value, dict) else ()
                    raise TableError(dotted(self.table, name, *below), problem, rule.accepted)

    def refuse(self, name: str, problem: str, accepted: str = "") -> NoReturn:
        """Raise a TableError for one key, with its row's words unless others are given."""
        key = f"{self.table}.{name}"
        raise TableError(key, problem, accepted or self.rules[key].accepted)


def check_run(run: str) -> None:
    """Raise a TableError unless `run` is a file or module, a colon and the name of a function."""
    place, colon, function = run.rpartition(":")
    is_file = place.endswith(".py") and re.split(r"[/\\]", place)[-1] != ".py"
    if not colon:
        problem = f'{shown(run)} does not end in ":" and the name of a function'
    elif not function.isidentifier() or keyword.iskeyword(function):
        problem = f"{shown(function)} in {shown(run)} is not the name of a function"
    elif not is_file and not all(part.isidentifier() for part in place.split(".")):
        problem = f"{shown(place)} in {shown(run)} is neither a .py file nor the name of a module"
    else:
        return
    raise TableError("kernel.run", problem, RULES["kernel.run"].accepted)


def default_layout(factors: int) -> str:
    """Return the order of the axes of an array of draws when none is given."""
    return "steps, paths" if factors == 1 else "steps, factors, paths"


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
        axes = tuple(axis.strip() for axis in (self.layout or default).split(","))
        # With one factor its axis may be there, of length one, or not; without paths the kernel takes one a call.
        whole = axes if "paths" in axes else (*axes, "paths")
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

    `measured`: those of a step come from the times of a kernel that rounds for itself, float64 being 1.
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
    table.table: table for table in (KernelTable, LadderTable, TargetTable, FormatsTable, CostTable, SamplingTable)
}
