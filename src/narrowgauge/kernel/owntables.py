"""The tables of kernels that round for themselves: `[library]` and `[command]`, and what such kernels cannot have.

`TABLES` and `RULES` are those of `audittables` with these two in their place.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import ClassVar

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.kernel import audittables
from narrowgauge.kernel.audittables import CostTable, FormatsTable, KernelTable, Rule, Table, TableError, kind_of, shown

__all__ = ["OWN_FORMATS", "RULES", "TABLES", "CommandTable", "LibraryTable", "check_own", "with_run"]

# The formats with a type of their own that NumPy, C and files have in common.
OWN_FORMATS = ("float16", "bfloat16", "float32", "float64")

_NAMES = "an array of names, each once"
_RULES: dict[str, Rule] = {
    "library.path": Rule(accepted="the path of a shared library, relative to the audit file"),
    "library.symbol": Rule(accepted='a name in C, such as "value" for the functions value_float16, value_float32 ...'),
    "library.parameters": Rule(accepted=f"{_NAMES}: the keys of [parameters] in the order in which the library reads"),
    "library.outputs": Rule(accepted=f"{_NAMES}: the quantities in the order in which the library writes them"),
    "command.run": Rule(accepted="an array of strings: a program, relative to the audit file, and its arguments"),
    "command.outputs": Rule(accepted=f"{_NAMES}: the quantities in the order of the rows of result.npy"),
    "command.seconds": Rule(accepted="a finite number above 0, at most 1e6", low=0.0, open_low=True, high=1e6),
}
RULES: dict[str, Rule] = {**audittables.RULES, **_RULES}


class LibraryTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[library]`: a shared library with a C function `symbol`_FORMAT for every format.

    It reads `parameters` in this order, arrays flattened, and writes the quantities `outputs` in this order.
    """

    table: ClassVar[str] = "library"
    rules: ClassVar[dict[str, Rule]] = _RULES
    path: str
    symbol: str
    parameters: tuple[str, ...] = ()
    outputs: tuple[str, ...]

    def __post_init__(self) -> None:
        super().__post_init__()
        if not (self.symbol.isidentifier() and self.symbol.isascii()):
            self.refuse("symbol", f"{shown(self.symbol)} is not a name in C")
        if not self.path.strip() or "\0" in self.path:
            self.refuse("path", f"{shown(self.path)} is no path")
        _check_names(self, "parameters", self.parameters)
        _check_names(self, "outputs", self.outputs)

    @property
    def run(self) -> str:
        """What stands for kernel.run in messages and in the record."""
        return f"{self.path}:{self.symbol}"


class CommandTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[command]`: a program with its arguments, the quantities of its result, and `seconds`, the limit of a call."""

    table: ClassVar[str] = "command"
    rules: ClassVar[dict[str, Rule]] = _RULES
    run: tuple[str, ...]
    outputs: tuple[str, ...]
    seconds: float = 60.0

    def __post_init__(self) -> None:
        super().__post_init__()
        if not self.run or not self.run[0]:
            self.refuse("run", "no program is named")
        for word in self.run:
            if "\0" in word:
                self.refuse("run", f"{shown(word)} holds a zero byte")
        _check_names(self, "outputs", self.outputs)


# In the order of the file.
TABLES: dict[str, type[Table]] = {
    "kernel": KernelTable,
    "library": LibraryTable,
    "command": CommandTable,
    **audittables.TABLES,
}


def with_run(kernel: object, library: LibraryTable | None, command: CommandTable | None) -> object:
    """Return the raw `[kernel]` table with `run` and `rounds` filled in from the table that says what is run.

    Raises TableError where both tables are there, or the kernel's own keys say something else.
    """
    if not isinstance(kernel, Mapping) or (library is None and command is None):
        return kernel
    if library is not None and command is not None:
        raise TableError("command", "[library] is there, too", "one of the two")
    name = "library" if library is not None else "command"
    for key, why in (
        ("run", f"[{name}] says what is run"),
        ("modules", f"[{name}] is no Python, of which modules could be copied"),
        ("shared", f"[{name}] is no Python, of which modules could be copied"),
    ):
        if key in kernel:
            raise TableError(f"kernel.{key}", why, "no such key")
    if kernel.get("rounds", "itself") != "itself":
        raise TableError("kernel.rounds", f"{shown(kernel['rounds'])}, but [{name}] cannot be emulated", '"itself"')
    run = library.run if library is not None else " ".join(command.run if command is not None else ())
    return {**kernel, "run": run, "rounds": "itself"}


def check_own(
    kernel: KernelTable,
    *,
    formats: FormatsTable,
    cost: CostTable,
    parameters: Mapping[str, object],
    library: LibraryTable | None,
    command: CommandTable | None,
) -> None:
    """Raise TableError for what a kernel that rounds for itself cannot have, or one that is emulated cannot measure."""
    if cost.measured:
        _check_measured(cost, kernel, command)
    if kernel.rounds != "itself":
        return
    if kernel.takes == "rng":
        raise TableError(
            "kernel.takes",
            '"rng" with rounds = "itself": the numbers of a generator reach a kernel in float64, and only the '
            "emulation can round them before they are used",
            '"increments", "normals" or "uniforms"',
        )
    if "paths" not in kernel.layout:
        why = f'{shown(kernel.layout)} names no paths, and a kernel with rounds = "itself" gets all paths in one call'
        raise TableError("kernel.layout", why, "an order of the axes with paths")
    if kernel.allow:
        why = 'with rounds = "itself" there is no emulation that a value could leave'
        raise TableError("kernel.allow", why, "no such key")
    for key in ("today", "narrow", "wide"):
        named = getattr(formats, key)
        for name in (named,) if isinstance(named, str) else named:
            if name not in OWN_FORMATS:
                why = f'{shown(name)} has no type of its own, in which a kernel with rounds = "itself" could get draws'
                raise TableError(f"formats.{key}", why, ", ".join(OWN_FORMATS))
    if library is not None:
        _check_parameters(library, parameters)


def _check_measured(cost: CostTable, kernel: KernelTable, command: CommandTable | None) -> None:
    """Raise TableError where the times of a kernel say nothing of its costs, or costs are given as well."""
    accepted = "false, and costs of a step"
    if kernel.rounds != "itself":
        why = "true, but the kernel is emulated, which takes other times"
        raise TableError("cost.measured", why, f'{accepted}; or a kernel with rounds = "itself"')
    if command is not None:
        raise TableError("cost.measured", "true, but a command spends its time on starting and on files", accepted)
    for name in FORMATS:
        if getattr(cost, name) is not None:
            raise TableError(f"cost.{name}", "given, though measured = true", "no such key, or measured = false")


def _check_parameters(library: LibraryTable, parameters: Mapping[str, object]) -> None:
    """Raise TableError unless `[library] parameters` names every parameter, and each is made of numbers."""
    known = ", ".join(parameters) or "none, since [parameters] is empty"
    for name in library.parameters:
        if name not in parameters:
            raise TableError("library.parameters", f"{shown(name)} is no key of [parameters]", known)
    for name, value in parameters.items():
        if name not in library.parameters:
            raise TableError("library.parameters", f"{shown(name)} of [parameters] is missing", known)
        if (odd := _not_number(value)) is not None:
            why = f"{shown(odd)} is {kind_of(odd)}, and a library gets float64 numbers"
            raise TableError(f"parameters.{name}", why, "a number, or an array of numbers")


def _not_number(value: object) -> object:
    """Return the first scalar that is no number, or None."""
    if isinstance(value, list):
        return next((odd for one in value if (odd := _not_number(one)) is not None), None)
    return None if isinstance(value, int | float) and not isinstance(value, bool) else value


def _check_names(table: Table, key: str, names: tuple[str, ...]) -> None:
    for name in names:
        if not name or not name.isprintable():
            table.refuse(key, f"{shown(name)} is no name")
        if names.count(name) > 1:
            table.refuse(key, f"{shown(name)} stands more than once")
    if key == "outputs" and not names:
        table.refuse(key, "the array is empty")
