"""The part of a box of parameters that can be claimed, and what scenarios that were drawn at random prove of the whole.

Scenarios and the audited point are tuples of values, one for each side of the box, in the order of the sides.
"""

from __future__ import annotations

import heapq
from collections.abc import Sequence

from scipy import stats

from narrowgauge.kernel.domaintable import AxisTable

__all__ = ["CONFIDENCE", "Box", "claimed", "failing_share", "inside", "share"]

Point = tuple[float, ...]
Box = tuple[tuple[float, float], ...]  # the lower and the upper end of each side

CONFIDENCE = 0.95
_MOST_BOXES = 20_000  # that are looked at before the search takes the best way on, and that alone


def share(axes: Sequence[AxisTable], box: Box) -> float:
    """Return the share of the whole box that a box inside it has, in the coordinates of the scales."""
    found = 1.0
    for axis, (low, high) in zip(axes, box, strict=True):
        found *= axis.place(high) - axis.place(low)
    return found


def inside(point: Point, box: Box) -> bool:
    """Return whether a point lies in a box, or on its border."""
    return all(low <= value <= high for value, (low, high) in zip(point, box, strict=True))


def claimed(
    axes: Sequence[AxisTable], audited: Point, passing: Sequence[Point], failing: Sequence[Point]
) -> Box | None:
    """Return the largest box that holds the audited point and none of the failing ones; None where it is one of them.

    Each side ends where the whole box does or at a value that a passing scenario, or the audited point, has there: what
    lies between the last one that passes and the first one that fails is not claimed. Largest is by share of the
    whole; of equally large ones the first in the order of their ends is taken. Boxes are cut at one failing point after
    the other, the largest first, so that the first box without one is the answer; after 20,000 boxes only the largest
    part of each is followed.
    """
    held = [*passing, audited]
    whole: Box = tuple((axis.low, axis.high) for axis in axes)
    waiting = [(-share(axes, whole), whole)]
    seen = {whole}
    while waiting:
        _, box = heapq.heappop(waiting)
        blocking = next((point for point in failing if inside(point, box)), None)
        if blocking is None:
            return box
        parts = [part for part in _parts(box, blocking, audited, held) if part not in seen]
        if len(seen) > _MOST_BOXES:
            parts, waiting = sorted(parts, key=lambda part: (-share(axes, part), part))[:1], []
        for part in parts:
            seen.add(part)
            heapq.heappush(waiting, (-share(axes, part), part))
    return None


def _parts(box: Box, failing: Point, audited: Point, held: Sequence[Point]) -> list[Box]:
    """Return the boxes without a failing point that one cut makes of a box, each with the audited point."""
    found = []
    for axis, (bad, good) in enumerate(zip(failing, audited, strict=True)):
        low, high = box[axis]
        if bad > good:
            high = max(point[axis] for point in held if good <= point[axis] < bad)
        elif bad < good:
            low = min(point[axis] for point in held if bad < point[axis] <= good)
        else:
            continue
        # An end is at most as far out as it was.
        found.append((*box[:axis], (max(low, box[axis][0]), min(high, box[axis][1])), *box[axis + 1 :]))
    return found


def failing_share(failed: int, scenarios: int) -> float:
    """Return below which share of a box fails, at 95% confidence, where `failed` of points drawn from all of it do.

    1 - .05^(1/n) for none of n; else the exact bound, "The use of confidence or fiducial limits illustrated in the case
    of the binomial", Biometrika 26(4), 1934, doi 10.1093/biomet/26.4.404 (recalled from memory). It takes the points
    for independent and evenly spread.
    """
    if failed >= scenarios:
        return 1.0
    if failed == 0:
        return float(1.0 - (1.0 - CONFIDENCE) ** (1.0 / scenarios))
    return float(stats.beta.ppf(CONFIDENCE, failed + 1, scenarios - failed))
