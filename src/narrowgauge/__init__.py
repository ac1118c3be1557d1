"""narrowgauge measures, level by level, where a Monte Carlo path kernel may run in low precision."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from narrowgauge.api import Audit, audit
    from narrowgauge.policy.guard import Policy

__all__ = ["Audit", "Policy", "audit"]
__version__ = "0.1.0"


def __getattr__(name: str) -> Any:
    """Import the audit, or the policy, only when it is asked for, so that `import narrowgauge` costs nothing."""
    if name == "Policy":
        from narrowgauge.policy.guard import Policy

        return Policy
    if name in __all__:
        from narrowgauge import api

        return getattr(api, name)
    raise AttributeError(f"module 'narrowgauge' has no attribute {name!r}")
