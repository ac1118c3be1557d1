"""Which route each of NumPy's ufuncs takes through the emulated arithmetic; tables.py has the other functions.

exact        moves, selects or compares values; never rounds
rounded      elementwise, one rounding of the correct result
accumulated  sums of products in a stated order
whole        what a newer NumPy adds: computed in float64, rounded once, and listed
refused      for the reason in the row

`ROUTES` are the elementary operations, which the arithmetic itself computes and `Setting.operate` runs. The others are
computed by a way of their own in ufuncs.py, and `NEITHER` is about integers, dates or text, which the state is not.
"""

from __future__ import annotations

from typing import Literal

import numpy as np

from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.dispatch.setting import Route

__all__ = ["INTEGERS", "NEITHER", "OTHERS", "ROUTES", "route_of"]

ROUTES: dict[np.ufunc, Route] = {
    ufunc: "exact" if way in ("exact", "truth") else "rounded" for ufunc, way in WAYS.items()
}

_OTHERS: dict[Route, str] = {
    "exact": "clip conjugate frexp modf nextafter spacing",
    "rounded": "divmod ldexp",
    "accumulated": "matmul matvec vecdot vecmat",
}

OTHERS: dict[str, Route] = {name: route for route, names in _OTHERS.items() for name in names.split()}

INTEGERS = frozenset(
    "bitwise_and bitwise_count bitwise_or bitwise_xor gcd invert lcm left_shift right_shift".split()  # noqa: SIM905
)
"""Exact on integers and booleans; NumPy's own TypeError on numbers of the state."""

_NEITHER = {
    "the state is no date": "isnat",
    "it is a part of NumPy's own code": "_ones_like",
    "the state is no text": "_center _expandtabs _expandtabs_length _ljust _lstrip_chars _lstrip_whitespace _partition "
    "_partition_index _replace _rjust _rpartition _rpartition_index _rstrip_chars _rstrip_whitespace _slice "
    "_strip_chars _strip_whitespace _zfill count endswith find index isalnum isalpha isdecimal isdigit islower "
    "isnumeric isspace istitle isupper rfind rindex startswith str_len",
}

NEITHER: dict[str, str] = {name: reason for reason, names in _NEITHER.items() for name in names.split()}


def route_of(ufunc: np.ufunc) -> Route | Literal["refused"]:
    """Return the route of one of NumPy's ufuncs; `whole` for one that this version does not know."""
    name = ufunc.__name__
    if name in NEITHER:
        return "refused"
    return ROUTES.get(ufunc) or OTHERS.get(name) or ("exact" if name in INTEGERS else "whole")
