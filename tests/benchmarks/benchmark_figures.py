"""A measured figure, what was asked of it, and a benchmark's figures with its notes: plain data, as JSON holds it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass, field
from typing import Any

import numpy as np

__all__ = ["Asked", "Figure", "Section", "at_least", "at_most", "figure_of"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Asked:
    """A bound that a figure is measured against."""

    sense: str  # "<=" or ">="
    bound: float

    def met(self, value: float) -> bool:
        """Whether a value keeps the bound."""
        return value <= self.bound if self.sense == "<=" else value >= self.bound


@dataclass(frozen=True, slots=True, kw_only=True)
class Figure:
    """`what` over `over`: median and quartiles over the rounds; `unit` is empty for a ratio.

    `kernel` and `block` (paths) say where it was measured, if that is one of several places.
    """

    what: str
    over: str
    value: float
    low: float
    high: float
    rounds: int
    unit: str = ""
    kernel: str | None = None
    block: int | None = None
    asked: Asked | None = None

    def document(self) -> dict[str, Any]:
        """Return the figure as JSON holds it, with whether it is what was asked."""
        met = None if self.asked is None else self.asked.met(self.value)
        return {**asdict(self), "met": met}

    @classmethod
    def read(cls, document: dict[str, Any]) -> Figure:
        """Return the figure of such a document."""
        values = {name: value for name, value in document.items() if name != "met"}
        asked = values.pop("asked")
        return cls(**values, asked=None if asked is None else Asked(**asked))


@dataclass(slots=True, kw_only=True)
class Section:
    """The figures of one benchmark; `notes` say what was left out, and why."""

    figures: list[Figure] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)

    def document(self) -> dict[str, Any]:
        """Return the section as JSON holds it."""
        return {"figures": [figure.document() for figure in self.figures], "notes": self.notes}

    @classmethod
    def read(cls, document: dict[str, Any]) -> Section:
        """Return the section of such a document."""
        return cls(figures=[Figure.read(one) for one in document["figures"]], notes=document["notes"])


def at_most(bound: float | None) -> Asked | None:
    """Return an upper bound, None for none."""
    return None if bound is None else Asked(sense="<=", bound=bound)


def at_least(bound: float | None) -> Asked | None:
    """Return a lower bound, None for none."""
    return None if bound is None else Asked(sense=">=", bound=bound)


def figure_of(values: Sequence[float], what: str, over: str, **further: Any) -> Figure:
    """Return the figure of values that were measured round by round."""
    low, middle, high = (float(q) for q in np.quantile(values, (0.25, 0.5, 0.75)))
    return Figure(what=what, over=over, value=middle, low=low, high=high, rounds=len(values), **further)
