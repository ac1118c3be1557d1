"""`[parameters]`: the constants a kernel gets by keyword, and values of Python turned into TOML's types."""

from __future__ import annotations

import copy
import keyword
import math
import unicodedata
from collections.abc import Mapping

import numpy as np

from narrowgauge.kernel.audittables import TableError, dotted, kind_of, shown

__all__ = ["check_parameter", "passed", "plain"]

_ACCEPTED = "a number, a string, a boolean, or an array of one of these"
_DEEPEST = 32  # NumPy's arrays end at 64 dimensions, documents at 64 levels; this leaves room in both


def check_parameter(name: str, value: object) -> None:
    """Raise a TableError unless a kernel can be given this value under this name."""
    key = dotted("parameters", name)
    if not name.isidentifier() or keyword.iskeyword(name):
        raise TableError(key, f"{shown(name)} cannot be the name of a Python argument", "a Python identifier")
    if (read := unicodedata.normalize("NFKC", name)) != name:
        # Python normalises the names in source text, but not those in a dictionary of arguments.
        raise TableError(key, f"Python reads the name {shown(name)} as {shown(read)}", shown(read))
    kinds = _kinds(value, key, 0)
    if len(kinds) > 1:
        raise TableError(key, f"the array mixes {' and '.join(sorted(kinds))}", _ACCEPTED)
    if kinds <= {"numbers"} and isinstance(value, list):
        _check_shape(value, key)


def passed(value: object) -> object:
    """Return a checked parameter as a kernel gets it: an array of numbers as a new float64 or int64 array.

    It is one of integers where all its numbers are, so that it may hold indices. The shape is that of the nesting; an
    empty array counts as one of float64. Arrays of strings or booleans are new lists.
    """
    if not isinstance(value, list):
        return value
    return np.array(value) if _kinds(value, "", 0) <= {"numbers"} else copy.deepcopy(value)


def plain(value: object, key: str = "", depth: int = 0) -> object:
    """Return a new value of TOML's types; what has no such type stays as it is, to be refused by its key.

    NumPy's arrays and scalars become lists and Python's scalars. Raises TableError where a key is no string,
    or where nesting does not end.
    """
    if depth > _DEEPEST + 3:  # a table, its key, and one array more than check_parameter accepts
        raise TableError(key, f"nested more than {_DEEPEST} deep", "a mapping of tables")
    if isinstance(value, np.ndarray | np.generic):
        value = value.tolist()
    if isinstance(value, Mapping):
        for name in value:
            if not isinstance(name, str):
                raise TableError(key, f"the key {name!r} is {kind_of(name)}", "keys that are strings")
        below = f"{key}." if key else ""
        return {str.__str__(name): plain(element, below + dotted(name), depth + 1) for name, element in value.items()}
    if isinstance(value, list | tuple):
        return [plain(element, f"{key}[{place}]", depth + 1) for place, element in enumerate(value)]
    # Members of enumerations and other subclasses would not be equal to what the record reads back.
    if isinstance(value, str):
        return str.__str__(value)
    if isinstance(value, int) and not isinstance(value, bool):
        return int(value)
    return float(value) if isinstance(value, float) else value


def _kinds(value: object, key: str, depth: int) -> set[str]:
    """Return the words for the kinds of scalars in a parameter; raise a TableError at one that is refused."""
    if isinstance(value, bool):
        return {"booleans"}
    if isinstance(value, str):
        return {"strings"}
    if isinstance(value, int | float):
        problem = _number_problem(value, in_array=depth > 0)
        if problem:
            raise TableError(key, f"{shown(value)} {problem}", "a finite number")
        return {"numbers"}
    if not isinstance(value, list):
        raise TableError(key, f"{shown(value)} is {kind_of(value)}", _ACCEPTED)
    if depth >= _DEEPEST:
        raise TableError(key, f"nested more than {_DEEPEST} deep", _ACCEPTED)
    found: set[str] = set()
    for place, element in enumerate(value):
        found |= _kinds(element, f"{key}[{place}]", depth + 1)
    return found


def _number_problem(value: int | float, *, in_array: bool) -> str | None:
    if isinstance(value, float):
        return None if math.isfinite(value) else "is not finite"
    if not -(2**63) <= value < 2**63:
        return "does not fit 64 bits"
    if in_array and int(float(value)) != value:
        return "is not a float64, which the numbers of an array become"
    return None


def _check_shape(value: list[object], key: str) -> None:
    """Raise a TableError unless all rows of a nested array, at every depth, have one length."""
    rows = [element for element in value if isinstance(element, list)]
    if rows and (len(rows) < len(value) or len({len(row) for row in rows}) > 1):
        raise TableError(key, "the rows of the array differ in length", "rows of one length")
    if rows:
        _check_shape([element for row in rows for element in row], key)
