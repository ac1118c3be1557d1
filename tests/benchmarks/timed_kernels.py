"""What is timed: each kernel of path_kernels.py with its draws, its parameters and the audit that names it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import path_kernels

from narrowgauge.draws.coarsen import Takes

__all__ = ["KERNELS", "PathKernel"]

_CORRELATED = [[1.0, 0.5, 0.2], [0.5, 1.0, 0.4], [0.2, 0.4, 1.0]]  # invented


@dataclass(frozen=True, slots=True, kw_only=True)
class PathKernel:
    """A kernel and how an audit calls it; `function` is the one that plain NumPy runs."""

    function: Callable[..., Any]
    takes: Takes = "increments"
    factors: int = 1
    parameters: dict[str, object] = field(default_factory=dict)

    def tables(self) -> dict[str, object]:
        """Return the tables of an audit that say which kernel: by its file, so that other processes find it too."""
        run = f"{path_kernels.__file__}:{self.function.__name__}"
        kernel = {"run": run, "takes": self.takes, "factors": self.factors}
        return {"kernel": kernel, "parameters": self.parameters}


KERNELS: dict[str, PathKernel] = {
    "one factor": PathKernel(function=path_kernels.one_factor),
    "stochastic volatility": PathKernel(function=path_kernels.stochastic_volatility, factors=2),
    "small matrix": PathKernel(
        function=path_kernels.small_matrix,
        factors=3,
        parameters={"root": np.linalg.cholesky(np.array(_CORRELATED))},
    ),
    "exp and log": PathKernel(function=path_kernels.exponentials, takes="normals"),
}
