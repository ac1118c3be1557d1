"""The table `[draws]` of an audit file: approximate normals that arms are to try beside the exact ones."""

from __future__ import annotations

from collections.abc import Mapping
from typing import ClassVar

import msgspec

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.kernel.rules import Table, check_run, shown

__all__ = ["DrawsTable", "counting_keys"]

# The kinds that are built in, each with the key of its size and what that is unless given.
_SIZES: dict[str, tuple[str, int]] = {
    "constant": ("cells", 1024),
    "linear": ("intervals", 16),
    "polynomial": ("degree", 9),
}


# Why a kernel that takes something else cannot be given approximate normals.
_NO_NORMALS = {
    "uniforms": "a kernel that takes uniforms makes its normals of them itself",
    "rng": "a kernel that draws for itself asks for its own distributions",
}


class DrawsTable(Table, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """`[draws]`: a built-in kind of approximate normals with its size, or a function; and the formats that try it.

    Sizes of other kinds are None. Without `formats` they are the narrow ones, which the audit file fills in.
    """

    table: ClassVar[str] = "draws"
    approximate: str
    cells: int | None = None
    intervals: int | None = None
    degree: int | None = None
    formats: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        super().__post_init__()
        own, default = _SIZES.get(self.approximate, ("", 0))
        if not own:
            check_run(self.approximate, f"{self.table}.approximate")
        for kind, (key, _) in _SIZES.items():
            size = getattr(self, key)
            if size is not None and key != own:
                self.refuse(key, f'{size} is the size of approximate = "{kind}"', "no such key")
        if own and getattr(self, own) is None:
            msgspec.structs.force_setattr(self, own, default)
        if self.cells is not None and self.cells.bit_count() != 1:
            self.refuse("cells", f"{self.cells} is not a power of two")
        if self.degree is not None and self.degree % 2 == 0:  # its best polynomial is that of the degree below
            self.refuse("degree", f"{self.degree} is not odd")
        for name in self.formats:
            if name not in FORMATS:
                self.refuse("formats", f"{shown(name)} is not a format")
            if self.formats.count(name) > 1:
                self.refuse("formats", f"{shown(name)} stands more than once")

    @property
    def built_in(self) -> bool:
        """Whether the map is one of this program's, not a function of the user's."""
        return self.approximate in _SIZES

    def check_takes(self, takes: object) -> None:
        """Raise a TableError unless a kernel takes draws that are made from normals."""
        why = _NO_NORMALS.get(takes) if isinstance(takes, str) else None
        if why is not None:
            self.refuse("approximate", why, 'no [draws], or kernel.takes = "increments" or "normals"')


def counting_keys(given: Mapping[str, object]) -> tuple[str, ...]:
    """Return the keys of a table [draws] that count for what it asks for: the size of another kind does not."""
    own, _ = _SIZES.get(str(given.get("approximate")), ("", 0))
    return tuple(name for name in ("approximate", own, "formats") if name)
