"""What every key of an audit file accepts, as rows, and what all tables are built on.

A table refuses a value that is of the right type but out of bounds by raising TableError, however it was made.
"""

from __future__ import annotations

import json
import keyword
import math
import re
from dataclasses import dataclass
from datetime import date, time
from typing import ClassVar, NoReturn

import msgspec

from narrowgauge.arithmetic.formats import FORMATS

__all__ = ["RULES", "Rule", "Table", "TableError", "check_run", "dotted", "kind_of", "shown"]

_NARROW = tuple(name for name in FORMATS if name != "float64")


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
_NAMES = "an array of names, each once"
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
    "library.path": Rule(accepted="the path of a shared library, relative to the audit file"),
    "library.symbol": Rule(accepted='a name in C, such as "value" for the functions value_float16, value_float32 ...'),
    "library.parameters": Rule(accepted=f"{_NAMES}: the keys of [parameters] in the order in which the library reads"),
    "library.outputs": Rule(accepted=f"{_NAMES}: the quantities in the order in which the library writes them"),
    "command.run": Rule(accepted="an array of strings: a program, relative to the audit file, and its arguments"),
    "command.outputs": Rule(accepted=f"{_NAMES}: the quantities in the order of the rows of result.npy"),
    "command.seconds": Rule(accepted="a finite number above 0, at most 1e6", low=0.0, open_low=True, high=1e6),
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
    "formats.narrow": Rule(accepted=f"an array of one or more of {', '.join(_NARROW)}"),
    "formats.wide": Rule(accepted=f"an array of {', '.join(FORMATS)}"),
    "formats.schemes": Rule(accepted='an array of one or both of "alone", "split"'),
    "draws.approximate": Rule(
        accepted='"constant", "linear", "polynomial", "file.py:function" or "package.module:function"'
    ),
    "draws.cells": Rule(accepted=f"a power of two from 2 to {2**20}", low=2, high=2**20),
    "draws.intervals": Rule(accepted="an integer from 1 to 52", low=1, high=52),
    "draws.degree": Rule(accepted="an odd integer from 1 to 31", low=1, high=31),
    "draws.formats": Rule(accepted=f"an array of one or more of {', '.join(FORMATS)}"),
    "branches.low": Rule(accepted='"file.py:function" or "package.module:function"'),
    "branches.correction": Rule(accepted='"file.py:function" or "package.module:function"'),
    "branches.rounds": Rule(accepted='"emulated" or "itself"'),
    "branches.library": Rule(accepted="the path of a shared library, relative to the audit file"),
    "branches.symbol": Rule(
        accepted='a name in C, such as "value" for value_float16_float32, value_float16_float64 ...'
    ),
    "branches.allow": Rule(accepted='"within budget"'),
    "branches.paths": Rule(accepted="an integer of 1 or more", low=1),
    "cost.float64": _POSITIVE,
    "cost.float32": _POSITIVE,
    "cost.float16": _POSITIVE,
    "cost.bfloat16": _POSITIVE,
    "cost.tf32": _POSITIVE,
    "cost.e4m3": _POSITIVE,
    "cost.e5m2": _POSITIVE,
    "cost.draws": _NOT_NEGATIVE,
    "cost.approximate_draws": _NOT_NEGATIVE,
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

    def __post_init__(self) -> None:
        for name in self.__struct_fields__:
            rule, value = RULES[f"{self.table}.{name}"], getattr(self, name)
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
        raise TableError(key, problem, accepted or RULES[key].accepted)


def check_run(run: str, key: str = "kernel.run") -> None:
    """Raise a TableError for a key unless `run` is a file or module, a colon and the name of a function."""
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
    raise TableError(key, problem, RULES[key].accepted)
