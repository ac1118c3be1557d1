"""The part of an audit's record that says how to know the kernel again."""

from __future__ import annotations

from typing import Literal

from narrowgauge.record.plan import Entry

__all__ = ["SourceEntry"]


class SourceEntry(Entry, frozen=True, kw_only=True):
    """The kernel's fingerprint as a policy has it: of syntax trees where there is Python source; `covers` says of what.

    `modules` are those listed, which it covers too; `imports` modules that are imported and not followed.
    """

    fingerprint: str
    covers: Literal["syntax trees", "bytes", "code"]
    modules: list[str]
    imports: list[str]
