"""The tables of kernels that round for themselves: `[library]` and `[command]`, which say what is run."""

from __future__ import annotations

from collections.abc import Mapping
from typing import ClassVar

from narrowgauge.kernel.rules import Table, TableError, shown

__all__ = ["OWN_FORMATS", "CommandTable", "LibraryTable", "with_run"]

# The formats with a type of their own that NumPy, C and files have in common.
OWN_FORMATS = ("float16", "bfloat16", "float32", "float64")


class LibraryTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[library]`: a shared library with a C function `symbol`_FORMAT for every format.

    It reads `parameters` in this order, arrays flattened, and writes the quantities `outputs` in this order.
    """

    table: ClassVar[str] = "library"
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


def _check_names(table: Table, key: str, names: tuple[str, ...]) -> None:
    for name in names:
        if not name or not name.isprintable():
            table.refuse(key, f"{shown(name)} is no name")
        if names.count(name) > 1:
            table.refuse(key, f"{shown(name)} stands more than once")
    if key == "outputs" and not names:
        table.refuse(key, "the array is empty")
