"""The parts of an audit's record that hold a plan: schemes and paths, by quantity and for all of them together."""

from __future__ import annotations

from typing import Literal

import msgspec

__all__ = ["AllocationEntry", "CommonLevelEntry", "CommonPlanEntry", "Entry", "PlanEntry", "SchemeEntry"]


class Entry(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """Base of every part of a record."""


class SchemeEntry(Entry, frozen=True, kw_only=True):
    """A way to estimate a level: alone in one arm, or split into a low and a correction branch."""

    kind: Literal["alone", "split"]
    narrow: str
    wide: str | None


class PlanEntry(Entry, frozen=True, kw_only=True):
    """Paths of one level: of its low branch or its only one, and of its correction branch.

    `bounded` is whether too few corrections were seen for a sample variance, so that they were planned from the upper
    bound of their variance.
    """

    level: int
    scheme: SchemeEntry
    paths: int
    correction_paths: int | None
    bounded: bool
    cost: float


class AllocationEntry(Entry, frozen=True, kw_only=True):
    """Paths for the target, their cost, and the saving over today and over the reference alone.

    On each level the scheme is the one that serves all quantities, as in the verdict; for a single quantity its best.
    `weak_error` estimates what remains of the discretisation beyond the finest level.
    """

    rmse: float | None
    levels: list[PlanEntry]
    cost: float | None
    saving: float | None
    saving_low: float | None
    saving_high: float | None
    saving_over_reference: float | None
    saving_over_reference_low: float | None
    saving_over_reference_high: float | None
    weak_error: float | None
    reason: str | None


class CommonLevelEntry(PlanEntry, frozen=True, kw_only=True):
    """Paths of one level for all quantities together, and by branch the quantity that needs so many."""

    paths_decided_by: str
    correction_paths_decided_by: str | None


class CommonPlanEntry(Entry, frozen=True, kw_only=True):
    """One plan for all quantities: per branch the most paths that any of them needs, and what that costs.

    The savings are the costs of today alone and of the reference alone, planned the same way, over that of this plan.
    """

    levels: list[CommonLevelEntry]
    cost: float | None
    saving: float | None
    saving_over_reference: float | None
    reason: str | None
