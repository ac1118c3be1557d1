"""Loads the examples, and makes their draws, for the tests beside this file."""

from __future__ import annotations

import importlib.util
import math
import tomllib
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Kernel = Callable[..., Mapping[str, NDArray[Any]]]

EXAMPLES = Path(__file__).parents[2] / "examples"
NAMES = ("reserve", "membrane")
PATHS = 65536

# Of a sample's mean from what it is compared with: by the normal approximation a false alarm in 5.7e-7 of seeds
# for each two-sided comparison, 2.9e-7 for each one-sided.
STANDARD_ERRORS = 5.0


def audit_file(name: str) -> dict[str, Any]:
    """Return the example's audit file as a mapping."""
    return tomllib.loads((EXAMPLES / name / f"{name}.toml").read_text(encoding="utf-8"))


def kernel_of(name: str) -> Kernel:
    """Return the function that the example's audit file names, from the file that it names."""
    file, function = audit_file(name)["kernel"]["run"].split(":")
    spec = importlib.util.spec_from_file_location(f"example_{name}", EXAMPLES / name / file)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    kernel: Kernel = getattr(module, function)
    return kernel


def increments(seed: int, steps: int, factors: int, *, horizon: float = 1.0, paths: int = PATHS) -> Array:
    """Return Brownian increments shaped (steps, paths) for one factor, (steps, factors, paths) for more."""
    shape = (steps, paths) if factors == 1 else (steps, factors, paths)
    draws: Array = np.random.default_rng(seed).standard_normal(shape)
    return draws * math.sqrt(horizon / steps)


def standard_errors_off(sample: Array, expected: float) -> float:
    """Return how many standard errors the sample's mean lies from the expected value."""
    return abs(float(sample.mean()) - expected) / (float(sample.std(ddof=1)) / math.sqrt(sample.size))
