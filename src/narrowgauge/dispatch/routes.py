"""Which route each NumPy function takes through the emulated arithmetic.

exact      moves, selects or compares values; never rounds
rounded    elementwise, one rounding of the correct result

What is in no row is refused by name. The routes `accumulated` and `whole` have no row in this version.
"""

from __future__ import annotations

import numpy as np

from narrowgauge.arithmetic.elementary import WAYS
from narrowgauge.dispatch.setting import Route

__all__ = ["ROUTES"]

ROUTES: dict[np.ufunc, Route] = {
    ufunc: "exact" if way in ("exact", "truth") else "rounded" for ufunc, way in WAYS.items()
}
