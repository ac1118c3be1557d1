"""The first operation in which two branches differ, found by value.

By position a statement that was moved would look like a difference. By value it is the first operation of each side
whose operands all occur on the other side, row by row along the paths, and whose result does not.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from narrowgauge.arithmetic.formats import Format
from narrowgauge.conduct.tracing import Trace
from narrowgauge.dispatch.setting import Place

__all__ = ["Kind", "Located", "Side", "first_difference"]

Kind = Literal["operation", "constant", "draws", "untraced"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Side:
    """The first differing operation of one side, with its values on the example path.

    `kind`: "operation", where all operands occur on the other side; "constant" or "draws", where an operand that no
    operation made does not, and `strange` is its value; "untraced", where that operand varies over the paths but was
    made where the trace could not see. `number` counts the operations of the run from 0. `couples`: the operation
    has operands with the axis of the paths and a result without, so that each path depends on the others.
    """

    kind: Kind
    place: Place | None
    operation: str
    number: int
    operands: tuple[float | tuple[float, ...], ...]
    result: float | tuple[float, ...]
    strange: float | None
    couples: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Located:
    """Where two branches part. A side is None where its trace does not reach so far.

    `path` is the example, by its number in the run of the low branch: the first on which what was returned differs, or
    the results of the two operations do. `ulps` is how far the two results are apart on it in ulps of the low branch's
    format, None where the two operations do not have the same operands. `incomplete` says in words why a side may be
    wrong or missing, None where it is not.
    """

    low: Side | None
    correction: Side | None
    path: int
    ulps: float | None
    incomplete: str | None

    @property
    def kind(self) -> Kind:
        """What differs first: the draws, a constant, an operation; "untraced" where it cannot be told."""
        raise NotImplementedError

    def __str__(self) -> str:
        """Return a sentence such as `model.py:14: add gives 1.0009765625 where checks.py:22: add gives 1.0`."""
        raise NotImplementedError


def first_difference(low: Trace, correction: Trace, *, form: Format) -> Located | None:
    """Return where two traced runs part, or None where both gave the same rows, and where nothing can be found.

    Both traces keep the same paths in the same order. `form` is the low branch's format, for `ulps`.
    Where both ran the same lines in the same order (one function in two batch sizes), operations are compared by
    position, which needs no luck however few the paths.
    """
    raise NotImplementedError
