"""The record of an audit: its types, from which the text of audit.json follows.

Figures are finite; one that does not exist is None, and a `reason` beside it says why. Intervals are flat: `gain`,
`gain_low`, `gain_high`. Variances are in the squared unit of the quantity, coefficients of the law in units of u^2,
costs in the unit of the audit file's cost table. Only `provenance` may differ between two runs of the same audit; where
costs of a step are measured, `costs` does as well, and what follows from it.
"""

from __future__ import annotations

from typing import Literal

import msgspec

from narrowgauge.record.averaging import AveragingEntry
from narrowgauge.record.branches import BranchesEntry, CastEntry, MismatchEntry, PointEntry, TriedEntry, WhereEntry
from narrowgauge.record.canary import CanaryEntry
from narrowgauge.record.costs import CostEntry
from narrowgauge.record.domain import DomainEntry
from narrowgauge.record.draws import DrawsEntry, OrderEntry, PartsEntry, SeparationEntry
from narrowgauge.record.lines import LinesEntry
from narrowgauge.record.plan import (
    AllocationEntry,
    CommonLevelEntry,
    CommonPlanEntry,
    Entry,
    PlanEntry,
    SchemeEntry,
)
from narrowgauge.record.reach import (
    ConstantEntry,
    ConstantValue,
    DecisionEntry,
    FaultEntry,
    LineCount,
    RangeEntry,
    ReachEntry,
    ReachLine,
    TrialEntry,
)
from narrowgauge.record.source import SourceEntry

__all__ = [
    "REJECTED_BELOW",
    "SCHEMA",
    "AccumulationEntry",
    "AllocationEntry",
    "ArmEntry",
    "AuditRecord",
    "BestEntry",
    "BranchesEntry",
    "CanaryEntry",
    "CastEntry",
    "CommonLevelEntry",
    "CommonPlanEntry",
    "ConstantEntry",
    "ConstantValue",
    "CorrectionEntry",
    "CostEntry",
    "DecisionEntry",
    "DrawsEntry",
    "FaultEntry",
    "FinestEntry",
    "KernelEntry",
    "LawEntry",
    "LevelEntry",
    "LineCount",
    "MismatchEntry",
    "OrderEntry",
    "PartsEntry",
    "PlanEntry",
    "PointEntry",
    "QuantityEntry",
    "RaisedEntry",
    "RangeEntry",
    "ReachEntry",
    "ReachLine",
    "ReferenceEntry",
    "RulesEntry",
    "SchemeEntry",
    "SeparationEntry",
    "TelescopingEntry",
    "TrialEntry",
    "TriedEntry",
    "VerdictEntry",
    "WhereEntry",
]

SCHEMA = "narrowgauge-audit/1"
REJECTED_BELOW = 0.001  # of `fit_p`: a law that holds is rejected once in a thousand fits


class KernelEntry(Entry, frozen=True, kw_only=True):
    """Which function was audited; the fingerprint is the SHA-256 of its source and of all listed modules.

    For a function handed over from Python it is that of its code, defaults and closure.
    """

    run: str
    fingerprint: str


class ArithmeticEntry(Entry, frozen=True, kw_only=True):
    """What one arm computes in, and with which draws; how a kernel that rounds for itself does it is not known."""

    format: str
    rounding: str
    subnormals: str | None
    fused: bool | None
    draws: str
    widened: list[str]


class RaisedEntry(Entry, frozen=True, kw_only=True):
    """What the kernel raised in an arm, and the line of the user's code."""

    type: str
    message: str
    file: str | None
    line: int | None


class TelescopingEntry(Entry, frozen=True, kw_only=True):
    """Mean of the reference's coarse path on this level less that of its fine path one level below, and its error.

    `sound` is whether the difference is within `rules.telescoping_se` standard errors.
    """

    difference: float | None
    se: float | None
    sound: bool


class ReferenceEntry(Entry, frozen=True, kw_only=True):
    """The reference on one level: P, and D with its standard error; `nonfinite` paths were dropped from all arms."""

    mean: float | None
    mean_se: float | None
    variance: float | None
    level_mean: float | None
    level_mean_se: float | None
    level_variance: float | None
    level_variance_se: float | None
    level_kurtosis: float | None
    nonfinite: int


class ArmEntry(Entry, frozen=True, kw_only=True):
    """One format on one level: the error E, the level difference D, and what the format is worth.

    `bias` is the mean of D^top - D^ref for the scheme's widest arm; `admitted_rmse` the smallest target that it
    admits (only without a target); `nonfinite_bound` the upper bound of the share of non-finite paths.
    """

    error_mean: float | None
    error_mean_se: float | None
    error_variance: float | None
    error_variance_se: float | None
    level_variance: float | None
    level_kurtosis: float | None
    nonfinite: int
    nonfinite_bound: float | None
    raised: RaisedEntry | None
    scheme: SchemeEntry | None
    gain: float | None
    gain_low: float | None
    gain_high: float | None
    edge: float | None
    edge_low: float | None
    edge_high: float | None
    bias: float | None
    bias_low: float | None
    bias_high: float | None
    verdict: Literal["pays", "does not pay", "undecided"] | None
    reason: str | None
    paths_needed: int | None
    admitted_rmse: float | None


class CorrectionEntry(Entry, frozen=True, kw_only=True):
    """The correction R between two arms; `counted` is whether it takes at most five values."""

    mean: float | None
    mean_se: float | None
    variance: float | None
    variance_se: float | None
    kurtosis: float | None
    effective_size: float | None
    events: int
    counted: bool
    breakeven_cost_ratio: float | None


class BestEntry(Entry, frozen=True, kw_only=True):
    """The admissible scheme with the smallest cost, and its gain over the level as it runs today."""

    kind: Literal["alone", "split"]
    narrow: str
    wide: str | None
    gain: float | None
    gain_low: float | None
    gain_high: float | None
    bias: float | None


class LevelEntry(Entry, frozen=True, kw_only=True):
    """One level of one quantity."""

    level: int
    steps: int
    h: float
    paths: int
    blocks: int
    telescoping: TelescopingEntry | None
    reference: ReferenceEntry
    arms: dict[str, ArmEntry]
    corrections: dict[str, CorrectionEntry]
    best: BestEntry | None


class LawEntry(Entry, frozen=True, kw_only=True):
    """The accumulation law fitted to a variance: u^2 (floor + walk n + drift n^2), n steps.

    Where the drift is not significant, `drift_low` 0, the law is `floor_without_drift` + `walk_without_drift` n.
    """

    floor: float | None
    floor_low: float | None
    floor_high: float | None
    walk: float | None
    walk_low: float | None
    walk_high: float | None
    drift: float | None
    drift_low: float | None
    drift_high: float | None
    slope: float | None
    slope_low: float | None
    slope_high: float | None
    deviation: float | None
    fit_p: float | None
    floor_without_drift: float | None
    walk_without_drift: float | None
    levels: list[int]
    reason: str | None


class AccumulationEntry(Entry, frozen=True, kw_only=True):
    """The law of one arm, of the error and of the correction to the reference, and a sentence about the first."""

    error: LawEntry
    correction: LawEntry
    sentence: str


class FinestEntry(Entry, frozen=True, kw_only=True):
    """The finest level where a format still pays; `possible` is the finest that is not refuted.

    `cautious` belongs to an extrapolated level: where it would end with every bound against the format.
    """

    level: int | None
    cautious: int | None
    possible: int | None
    extrapolated: bool
    reason: str | None


class DecidedEntry(FinestEntry, frozen=True, kw_only=True):
    """The finest paying level over all quantities, and the quantity that decides it."""

    decided_by: str | None


class OrdersEntry(Entry, frozen=True, kw_only=True):
    """Orders in h, from the four finest levels: of V_l and of |mean D_l|; None where they cannot be told."""

    level_variance: float | None
    level_mean: float | None


class AgreementEntry(Entry, frozen=True, kw_only=True):
    """Whether walk is the same within 5% in every format: the delta^2 part of the law."""

    agrees: bool | None
    spread: float | None
    reason: str | None


class QuantityEntry(Entry, frozen=True, kw_only=True):
    """Everything about one quantity; `accumulation` of the arms with exact draws, `separation` with [draws] alone."""

    levels: list[LevelEntry]
    accumulation: dict[str, AccumulationEntry]
    agreement: AgreementEntry
    orders: OrdersEntry
    finest_paying_level: dict[str, FinestEntry]
    allocation: AllocationEntry
    separation: SeparationEntry | msgspec.UnsetType = msgspec.UNSET


class VerdictEntry(Entry, frozen=True, kw_only=True):
    """The worst quantity decides. `sound` is whether the reference's levels telescope in every quantity.

    `schemes` holds, level by level, the scheme of a run that serves all quantities: the admissible one with the
    smallest worst ratio of its cost to that of a quantity's own best. None where there is none.
    """

    sound: bool
    finest_paying_level: dict[str, DecidedEntry]
    schemes: list[SchemeEntry | None]
    plan: CommonPlanEntry


class RulesEntry(Entry, frozen=True, kw_only=True):
    """The limits by which figures became verdicts.

    `telescoping_se` is how many standard errors apart the reference's levels may lie, `least_effective_size` how many
    paths must carry a correction, `worthwhile` the edge below which a format does not pay. Rounding may shift the mean
    of one level by bias_share x rmse / levels_sharing; without a target bias_share is the default.
    """

    telescoping_se: float
    least_effective_size: int
    worthwhile: float
    bias_share: float
    levels_sharing: int


class AuditRecord(Entry, frozen=True, kw_only=True):
    """The whole audit; parts that a later version fills are None.

    `branches` is None where no scheme is a split. `draws` is there with [draws] alone, `canary` with a kernel that
    rounds for itself, `costs` where they are measured.
    """

    schema: str
    kernel: KernelEntry
    source: SourceEntry | msgspec.UnsetType = msgspec.UNSET
    asked: dict[str, object]
    rules: RulesEntry
    arms: dict[str, ArithmeticEntry]
    quantities: dict[str, QuantityEntry]
    verdict: VerdictEntry
    reach: ReachEntry | None
    branches: BranchesEntry | None = None
    range: RangeEntry | None = None
    canary: list[CanaryEntry] | msgspec.UnsetType = msgspec.UNSET
    costs: dict[str, CostEntry] | msgspec.UnsetType = msgspec.UNSET
    lines: LinesEntry | None = None
    averaging: AveragingEntry | None = None
    domain: DomainEntry | None = None
    cautions: list[str]
    provenance: dict[str, object]
    draws: DrawsEntry | msgspec.UnsetType = msgspec.UNSET

    def document(self) -> dict[str, object]:
        """Return the record as plain mappings, lists and numbers, in the order of the fields."""
        plain: dict[str, object] = msgspec.to_builtins(self)
        return plain
