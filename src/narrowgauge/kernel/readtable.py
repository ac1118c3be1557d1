"""From a plain table of an audit file to its record; whatever is wrong is a TableError with the key."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import TypeVar

import msgspec

from narrowgauge.kernel.audittables import (
    RULES,
    TABLES,
    CostTable,
    DrawsTable,
    FormatsTable,
    Table,
    TableError,
    dotted,
    kind_of,
    shown,
)
from narrowgauge.kernel.givenkeys import CHEAP, nearest

__all__ = ["costs_of", "draws_of", "table_of"]

_Record = TypeVar("_Record", bound=Table)


def costs_of(raw: Mapping[str, object]) -> CostTable:
    """Return the costs; without the table those by storage. An approximate draw costs an exact one's unless it says."""
    cost = table_of(CostTable, raw["cost"]) if "cost" in raw else CostTable.by_storage()
    if "draws" not in raw or cost.approximate_draws is not None:
        return cost
    return msgspec.structs.replace(cost, approximate_draws=cost.draws)


def draws_of(raw: Mapping[str, object]) -> DrawsTable | None:
    """Return the table of approximate draws, tried in the narrow formats unless it says in which; None without one."""
    kernel, cost = raw["kernel"], raw.get("cost")
    if "draws" not in raw:
        if isinstance(cost, dict) and CHEAP in cost:
            raise TableError(f"cost.{CHEAP}", "there are no approximate draws", "no such key, or a table [draws]")
        return None
    draws = table_of(DrawsTable, raw["draws"])
    if isinstance(kernel, dict):
        draws.check_takes(kernel.get("takes"))
    if draws.formats:
        return draws
    if isinstance(raw["draws"], dict) and "formats" in raw["draws"]:
        draws.refuse("formats", "the array is empty")
    return msgspec.structs.replace(draws, formats=table_of(FormatsTable, raw.get("formats", {})).narrow)


def table_of(record: type[_Record], raw: object) -> _Record:
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
