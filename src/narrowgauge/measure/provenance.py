"""Where and with what an audit was measured: the only part of a record that may differ between two runs."""

from __future__ import annotations

import datetime
import functools
import json
import os
import platform
from collections.abc import Sequence
from importlib import metadata

import numpy as np
from threadpoolctl import threadpool_info

from narrowgauge import __version__
from narrowgauge.arithmetic import compiled

__all__ = ["fingerprint_of_process", "provenance", "versions"]

_PACKAGES = ("narrowgauge", "numpy", "ml_dtypes", "scipy", "msgspec")
_COUNTING = ("numpy", "ml_dtypes", "scipy")  # those whose next version may give other bits
_SMALLEST_NORMAL = np.array([2.0**-1022])


def provenance(
    seconds: float, engine: str, fingerprints: Sequence[str], resumed: int, damaged: int = 0
) -> dict[str, object]:
    """Return versions, machine class, time of day (UTC), duration in seconds and workers, as plain data.

    `engine` says in words what ran the blocks, `fingerprints` are those of `fingerprint_of_process`, each once;
    `resumed` is how many blocks were there from before, `damaged` how many more were, and had to be run again.
    """
    return {
        "finished": datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
        "seconds": round(seconds, 3),
        "python": platform.python_version(),
        "packages": {name: metadata.version(name) for name in _PACKAGES},
        "system": platform.system(),
        "machine": platform.machine(),
        "processors": os.cpu_count(),
        "vector_features": _vector_features(),
        "engine": engine,
        "resumed_blocks": resumed,
        **({"damaged_blocks": damaged} if damaged else {}),
        "workers": [json.loads(text) for text in fingerprints],
    }


def versions() -> dict[str, str]:
    """Return the versions that the bits of an audit may hang on."""
    found = {name: metadata.version(name) for name in _COUNTING}
    return {"narrowgauge": __version__, **found, "python": platform.python_version()}


def fingerprint_of_process() -> str:
    """Return what decides the bits of a worker, as one line of JSON with sorted keys.

    Versions, machine and processor features; whether subnormal numbers are alive in this thread, which a library that
    a kernel imports may change; the most threads that a library of linear algebra would take. Beside these, what there
    is to say about compiling here, which decides no bit.
    """
    return _described(bool((_SMALLEST_NORMAL * 0.5 > 0.0).all()), compiled.note())


@functools.cache
def _described(subnormals: bool, compiling: str | None) -> str:
    """Return the fingerprint, which takes longer to find out than a small block does."""
    found: dict[str, object] = {
        **versions(),
        "system": platform.system(),
        "machine": platform.machine(),
        "vector_features": _vector_features(),
        "subnormals": subnormals,
        "threads": max((library["num_threads"] for library in threadpool_info()), default=1),
        "compiling": compiling,
    }
    return json.dumps(found, sort_keys=True)


def _vector_features() -> list[str]:
    """Return the processor features that NumPy's own loops use: float32 exp and log differ between them."""
    found = np.show_config(mode="dicts") or {}
    features = found.get("SIMD Extensions", {})
    return [*features.get("baseline", []), *features.get("found", [])]
