"""Arms by name: one arithmetic with one kind of draws, such as "float16" or "float16/approximate"."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from narrowgauge.arithmetic.formats import FORMATS, Format

__all__ = ["Arm", "Kind", "wider"]

Kind = Literal["exact", "approximate"]

_APPROXIMATE = "/approximate"


@dataclass(frozen=True, slots=True)
class Arm:
    """The name of a format, and the kind of draws; `name` is how records, tallies and schemes call the arm."""

    format: str
    draws: Kind = "exact"

    @classmethod
    def named(cls, name: str) -> Arm:
        """Return the arm of that name."""
        form = name.removesuffix(_APPROXIMATE)
        return cls(form, "exact" if form == name else "approximate")

    @property
    def name(self) -> str:
        """The format's name alone where draws are exact."""
        return self.format if self.exact else f"{self.format}{_APPROXIMATE}"

    @property
    def exact(self) -> bool:
        """Whether its draws have the intended distribution."""
        return self.draws == "exact"

    @property
    def form(self) -> Format:
        """The format itself."""
        return FORMATS[self.format]


def wider(name: str, than: str) -> bool:
    """Whether one arm, by name, can correct another: exact draws, and more precision.

    Of an arm with approximate draws an equal precision is enough. Nothing is corrected to approximate draws.
    """
    one, other = Arm.named(name), Arm.named(than)
    more = one.form.precision - other.form.precision
    return one.exact and (more > 0 or (more == 0 and not other.exact))
