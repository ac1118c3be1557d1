"""Whether one extra rounding explains how two branches part."""

from __future__ import annotations

from typing import Literal

from narrowgauge.arithmetic.formats import Format
from narrowgauge.conduct.firstdifference import Located
from narrowgauge.conduct.tracing import Trace

__all__ = ["Cause", "explains"]

Cause = Literal["fused multiply-add", "wider intermediate"]


def explains(located: Located, low: Trace, correction: Trace, form: Format) -> Cause | None:
    """Return what explains the located difference on every kept path, if anything does; `form` is the narrow format.

    "fused multiply-add": one side rounds a product and then a sum, and the other has the row of the exact product plus
    the third number rounded once. "wider intermediate": the other side has the row of the same operation in float32 or
    float64.
    """
    raise NotImplementedError
