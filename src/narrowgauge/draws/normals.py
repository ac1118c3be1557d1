"""Exact normal draws, by inversion of the uniforms."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy import special

__all__ = ["exact_normals", "normal_cdf"]


def exact_normals(
    uniforms: npt.NDArray[np.float64], out: npt.NDArray[np.float64] | None = None
) -> npt.NDArray[np.float64]:
    """Return the standard normal quantiles of uniforms in (0, 1), float64 of the same shape; in `out` if given."""
    return np.asarray(special.ndtri(uniforms, out=out))


def normal_cdf(normals: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
    """Return the standard normal distribution function, float64 of the same shape."""
    return np.asarray(special.ndtr(normals))
