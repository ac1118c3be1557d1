"""NumPy's float types in the copy of a function whose casts are ignored: called, they leave a value as it is."""

from __future__ import annotations

from typing import Any

import numpy as np

from narrowgauge.dispatch.setting import Setting, Wrapped

__all__ = ["ignored_casts"]

_NAMES = ("float16", "float32", "float64", "half", "single", "double")


def ignored_casts(setting: Setting) -> dict[str, type]:
    """Return stand-ins for NumPy's float types by name; none where the setting does not ignore casts.

    As a dtype each is the type that it stands for, and `isinstance` sees that one too.
    """
    return {} if setting.casts is None else {name: _ignored(setting, getattr(np, name)) for name in _NAMES}


def _ignored(setting: Setting, plain: type) -> type:
    class Like(type):
        def __instancecheck__(cls, value: Any) -> bool:
            return isinstance(value, plain)

        def __subclasscheck__(cls, kind: type) -> bool:
            return issubclass(kind, plain)

    def made(cls: type, value: Any = 0.0) -> Any:
        setting.float_dtype(plain)  # which counts it
        if isinstance(value, Wrapped):
            return setting.wrap(setting.admit(value))
        return np.asarray(value, np.float64)[()]

    return Like(plain.__name__, (plain,), {"__new__": made})
