"""Where and with what an audit was measured: the only part of a record that may differ between two runs."""

from __future__ import annotations

import datetime
import os
import platform
from importlib import metadata

import numpy as np

__all__ = ["provenance"]

_PACKAGES = ("narrowgauge", "numpy", "ml_dtypes", "scipy", "msgspec")


def provenance(seconds: float) -> dict[str, object]:
    """Return versions, machine class, time of day (UTC) and duration in seconds, as plain data."""
    return {
        "finished": datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
        "seconds": round(seconds, 3),
        "python": platform.python_version(),
        "packages": {name: metadata.version(name) for name in _PACKAGES},
        "system": platform.system(),
        "machine": platform.machine(),
        "processors": os.cpu_count(),
        "vector_features": _vector_features(),
    }


def _vector_features() -> list[str]:
    """Return the processor features that NumPy's own loops use: float32 exp and log differ between them."""
    found = np.show_config(mode="dicts") or {}
    features = found.get("SIMD Extensions", {})
    return [*features.get("baseline", []), *features.get("found", [])]
