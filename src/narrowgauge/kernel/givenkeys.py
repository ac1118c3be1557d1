"""Which tables and keys an audit file gives: unknown ones, missing ones, and the defaults of those it leaves out."""

from __future__ import annotations

import difflib
from collections.abc import Collection, Mapping

import msgspec

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.kernel.audittables import TABLES, Table, TableError, dotted, kind_of, shown
from narrowgauge.kernel.branchestable import defaults_of
from narrowgauge.kernel.domaintable import scales_assumed
from narrowgauge.kernel.drawstable import counting_keys
from narrowgauge.kernel.gatetable import refusal_of

__all__ = ["CHEAP", "check_drawing", "check_names", "defaults_in_use", "document", "nearest", "useless"]

CHEAP = "approximate_draws"  # a cost that counts with [draws] alone

_ORDER = (
    *("kernel", "library", "command", "parameters", "ladder", "target", "formats", "draws", "branches", "cost"),
    *("sampling", "domain", "lines", "policy", "gate"),  # the last two are the gate's
)
_REQUIRED = ("kernel", "ladder")
_OWN = ("kernel.rounds", "cost.measured")  # keys that count for a kernel that rounds for itself alone


def check_names(raw: dict[str, object]) -> None:
    """Raise a TableError at the first unknown table or key, or at a required table that is not there."""
    for name, value in raw.items():
        if name not in _ORDER:
            homes = [table for table, record in TABLES.items() if name in record.__struct_fields__]
            if not isinstance(value, dict) and homes:
                hint = f"a key outside every table, perhaps {shown(f'{homes[0]}.{name}')} is meant"
            else:
                hint = "unknown table" + nearest(name, _ORDER)
            raise TableError(dotted(name), hint, ", ".join(_ORDER))
        if name in TABLES and not isinstance(value, dict):
            keys = ", ".join(TABLES[name].__struct_fields__)
            raise TableError(name, f"{shown(value)} is {kind_of(value)}", f"a table with keys of {keys}")
    if (refusal := refusal_of(raw)) is not None:
        raise TableError(*refusal)
    for name in _REQUIRED:
        if name not in raw:
            needed = " and ".join(field.name for field in msgspec.structs.fields(TABLES[name]) if field.required)
            raise TableError(name, "the table is missing", f"a table [{name}] with {needed}")


def check_drawing(kernel: object) -> None:
    """Raise a TableError for a key that describes an array of draws where the kernel draws for itself."""
    if isinstance(kernel, dict) and kernel.get("takes") == "rng":
        for key in ("factors", "layout"):
            if key in kernel:
                problem = f'{shown(kernel[key])} describes an array of draws, which takes = "rng" has not'
                raise TableError(f"kernel.{key}", problem, "no such key; it is worked out from what the kernel draws")


def nearest(name: str, known: tuple[str, ...]) -> str:
    """Return the words of a hint at the known name that an unknown one is like, or nothing."""
    match = difflib.get_close_matches(name, known, n=1)
    return f", perhaps {shown(match[0])} is meant" if match else ""


def useless(*, own: bool, draws: bool) -> tuple[str, ...]:
    """Return the dotted keys that say nothing, whether a kernel rounds on its `own` and whether there are [draws]."""
    return (*(() if own else _OWN), *(() if draws else (f"cost.{CHEAP}",)))


def document(table: Table, without: Collection[str]) -> dict[str, object]:
    """Return a table as a plain mapping, with every default and `without` some dotted keys."""
    names = [name for name in table.__struct_fields__ if f"{table.table}.{name}" not in without]
    values = ((name, getattr(table, name)) for name in names)
    return {name: list(value) if isinstance(value, tuple) else msgspec.to_builtins(value) for name, value in values}


def defaults_in_use(raw: Mapping[str, object]) -> tuple[str, ...]:
    """Return the dotted keys of all defaults in use, in order of the file."""
    kernel, assumed = raw.get("kernel"), list[str]()
    own = isinstance(kernel, Mapping) and kernel.get("rounds") == "itself"
    without = useless(own=own, draws="draws" in raw)
    for table, record in TABLES.items():
        given = raw.get(table)
        keys = [name for name in record.__struct_fields__ if not isinstance(given, dict) or name not in given]
        if table == "target" and given is None:
            keys = ["worthwhile"]  # the one key of it that counts without a target
        if table in ("library", "command", "domain", "lines") and given is None:
            keys = []
        if table == "draws":
            keys = [name for name in keys if isinstance(given, dict) and name in counting_keys(given)]
        if table == "lines":
            keys = [name for name in keys if name in ("paths", "search", "what_ifs")]  # the result has the rest
        if table == "branches":
            keys = [name for name in keys if isinstance(given, dict) and name in defaults_of(given)]
        if table == "cost" and given is not None:
            keys = [name for name in keys if name not in FORMATS]  # a format without a cost is not used
        if table == "domain":
            keys += scales_assumed(given)
        assumed.extend(key for name in keys if (key := f"{table}.{name}") not in without)
    return tuple(assumed)
