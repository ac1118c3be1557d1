"""What an audit's record says about a kernel that rounds for itself: whether it does so in the format it claims."""

from __future__ import annotations

from typing import Literal

from narrowgauge.record.plan import Entry

__all__ = ["CanaryEntry", "Finding"]

# "rounds": results differ from those of every wider format rounded once, so that something on the way is rounded.
# "result only": they are those of `like` rounded once at the end. "wider": they are those of `like`, not rounded at
# all. "narrower": they are, or err like, those of the narrower format `like`. "unknown": hardly anything rounds here.
Finding = Literal["rounds", "result only", "wider", "narrower", "unknown"]


class CanaryEntry(Entry, frozen=True, kw_only=True):
    """What one quantity of one arm shows on `paths` draws of `level`, and on as many draws that shrink to nothing.

    `outside`: results that the format does not have. `rounded_once` and `rounded_once_small`: of the results that need
    rounding, on draws and on shrinking draws, the largest share that a wider format gives on the same draws when its
    result is rounded once; None in the reference, which has none wider, and where hardly any needs rounding. `error`:
    the median distance from the reference on the same draws, in units of u |P|.
    """

    arm: str
    quantity: str
    level: int
    paths: int
    finding: Finding
    like: str | None
    outside: int
    rounded_once: float | None
    rounded_once_small: float | None
    error: float | None
