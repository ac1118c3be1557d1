"""The precision policy: its types, from which its text and its published schema follow, and its reader.

A policy says, level by level, how a run is to be made that reaches the target of an audit. It is data: reading one
never runs code. Figures are finite; one that does not exist is None. Intervals are flat: `gain`, `gain_low`,
`gain_high`. Variances are in the squared unit of the quantity, costs in the unit of the cost table.
"""

from __future__ import annotations

import re
from pathlib import Path
from typing import Annotated, Any, Final, Literal

from msgspec import UNSET, Meta, UnsetType, to_builtins

from narrowgauge import __version__
from narrowgauge.record.audit import DecidedEntry
from narrowgauge.record.canonical import DocumentError, canonical_text, read_strict
from narrowgauge.record.plan import Entry
from narrowgauge.record.reach import LineCount
from narrowgauge.record.reading import converted, shown, text_of

__all__ = [
    "LARGEST",
    "SCHEMA",
    "AdvicePart",
    "ArmPart",
    "CostPart",
    "DomainPart",
    "EvidencePart",
    "FormatName",
    "KernelPart",
    "LadderPart",
    "LawPart",
    "LawsPart",
    "LevelPart",
    "LinePart",
    "MachinePart",
    "MeasuredPart",
    "ParameterPart",
    "PlanPart",
    "PolicyDocument",
    "SharePart",
    "TargetPart",
    "policy_text",
    "read_policy",
    "read_policy_text",
]

SCHEMA: Final = "narrowgauge-policy/1"
_NAME, _VERSION = "narrowgauge-policy", 1
LARGEST = 16 * 2**20  # bytes of a policy

FormatName = Literal["float64", "float32", "float16", "bfloat16", "tf32", "e4m3", "e5m2"]
Plain = bool | int | float | str | list[Any] | None
# Whole numbers up to 2^53 are the same in every language that reads JSON.
Count = Annotated[int, Meta(ge=0, le=2**53)]
Number = Annotated[int, Meta(ge=1, le=2**53)]
LevelNumber = Annotated[int, Meta(ge=0, le=64)]
Positive = Annotated[float, Meta(gt=0)]
NotNegative = Annotated[float, Meta(ge=0)]
Share = Annotated[float, Meta(ge=0, le=1)]
Digest = Annotated[str, Meta(pattern="^sha256:[0-9a-f]{64}$", max_length=71)]


class KernelPart(Entry, frozen=True, kw_only=True):
    """What was audited, and how to tell whether a kernel is the same.

    `fingerprint` is of what `covers` says: the syntax trees of the kernel's file and of `modules`, which formatting and
    comments do not change; the bytes of a library or of a command's files; or the code of a function without a file.
    `raw` is the audit's own, of the bytes. `imports` are modules that the fingerprint does not follow, `packages`
    versions at the audit, `unseen` in words what the fingerprint cannot see.
    """

    run: str
    fingerprint: Digest
    covers: Literal["syntax trees", "bytes", "code"]
    raw: Digest
    modules: list[str]
    imports: list[str]
    packages: dict[str, str]
    unseen: list[str]


class LadderPart(Entry, frozen=True, kw_only=True):
    """The levels: 0 to `finest`, level l with coarsest_steps x refinement^l steps over `horizon`."""

    horizon: Positive
    coarsest_steps: Number
    refinement: Annotated[int, Meta(ge=2, le=2**20)]
    finest: LevelNumber


class TargetPart(Entry, frozen=True, kw_only=True):
    """The root-mean-square error by quantity, and what rounding may shift the mean of one level by: `bias_budget`."""

    rmse: Annotated[dict[str, Positive], Meta(min_length=1)]
    bias_share: Share
    bias_budget: Annotated[dict[str, NotNegative], Meta(min_length=1)]
    worthwhile: float


class ParameterPart(Entry, frozen=True, kw_only=True, omit_defaults=True):
    """What was audited of one parameter: the one value `fixed`, or all from `low` to `high`, audited on a `scale`."""

    fixed: Plain = None
    low: float | None = None
    high: float | None = None
    scale: Literal["linear", "log"] | None = None

    def __post_init__(self) -> None:
        box = [self.low, self.high, self.scale]
        if (self.fixed is None) == (None in box) or (self.fixed is not None and box != [None] * 3):
            raise ValueError("a parameter has either fixed, or low, high and scale")
        if self.low is not None and self.high is not None and not self.low < self.high:
            raise ValueError("low is not below high")
        if self.scale == "log" and self.low is not None and self.low <= 0:
            raise ValueError("a log scale begins above 0")
        if not _plain(self.fixed):
            raise ValueError("fixed is a number of at most 64 bits, a string, a boolean, or an array of these")


class DomainPart(Entry, frozen=True, kw_only=True):
    """The parameters for which the policy holds: those audited; `scenarios` of them (1: the fixed values alone).

    `failing_below` is the share of the box that, with 95% confidence, at most fails; None for a single point.
    """

    parameters: dict[str, ParameterPart]
    scenarios: Number
    failing_below: Share | None
    remarks: list[str]


class SharePart(Entry, frozen=True, kw_only=True):
    """How often something happens among `operations`, with its interval."""

    share: Share
    low: Share
    high: Share
    operations: Count


class ArmPart(Entry, frozen=True, kw_only=True):
    """What one arm measured on one level for one quantity; a later measurement is compared with it.

    The error is path by path against the reference; `effective_size` is that of the correction to the reference.
    Lost additions and subnormals are there where an audit counted them.
    """

    error_mean: float | None
    error_mean_low: float | None
    error_mean_high: float | None
    error_variance: NotNegative | None
    error_variance_low: NotNegative | None
    error_variance_high: NotNegative | None
    level_variance: NotNegative | None
    effective_size: NotNegative | None
    nonfinite: Count
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
    lost_additions: SharePart | UnsetType = UNSET
    subnormals: SharePart | UnsetType = UNSET


class MeasuredPart(Entry, frozen=True, kw_only=True):
    """What the audit measured on one level for one quantity: the reference's figures from `paths` paths, and by arm."""

    paths: Number
    mean: float | None
    mean_se: NotNegative | None
    variance: NotNegative | None
    level_mean: float | None
    level_mean_se: NotNegative | None
    level_variance: NotNegative | None
    level_variance_se: NotNegative | None
    arms: dict[str, ArmPart]


class LevelPart(Entry, frozen=True, kw_only=True):
    """How to estimate one level: the scheme, its formats and draws, and the paths of each branch.

    `alone` runs `paths` in `narrow`; `split` runs `paths` in `narrow` and `correction_paths` in both, on draws of their
    own. `draws` are those of the narrow branch, a wide one always has exact ones. `verdict` is "pays" where the narrow
    format pays for every quantity; else the reference is used, since none pays or since it is undecided, as `reason`
    says. Gain, edge and break-even cost ratio are those of the quantity that `decided_by` names, the worst.
    """

    level: LevelNumber
    steps: Number
    h: Positive
    scheme: Literal["alone", "split"]
    narrow: FormatName
    wide: FormatName | None
    draws: Literal["exact", "approximate"]
    rounding: str
    paths: Number
    correction_paths: Number | None
    verdict: Literal["pays", "does not pay", "undecided"]
    reason: str | None
    decided_by: str | None
    gain: float | None
    gain_low: float | None
    gain_high: float | None
    edge: float | None
    edge_low: float | None
    edge_high: float | None
    breakeven_cost_ratio: NotNegative | None
    measured: dict[str, MeasuredPart]

    def __post_init__(self) -> None:
        alone = self.scheme == "alone"
        if (self.wide is None) != alone or (self.correction_paths is None) != alone:
            raise ValueError("a split, and nothing else, has wide and correction_paths")
        if self.wide is not None and self.wide == self.narrow and self.draws == "exact":
            raise ValueError("narrow and wide are the same")


class LawPart(Entry, frozen=True, kw_only=True):
    """The accumulation law fitted to a variance: u^2 (floor + walk n + drift n^2), n steps; None with a `reason`."""

    floor: NotNegative | None
    floor_low: NotNegative | None
    floor_high: NotNegative | None
    walk: NotNegative | None
    walk_low: NotNegative | None
    walk_high: NotNegative | None
    drift: NotNegative | None
    drift_low: NotNegative | None
    drift_high: NotNegative | None
    reason: str | None


class LawsPart(Entry, frozen=True, kw_only=True):
    """The law of one arm: of the error, and of the correction to the reference."""

    error: LawPart
    correction: LawPart


class CostPart(Entry, frozen=True, kw_only=True):
    """The cost table that every gain rests on: of a step by format, of a draw, of a path; who said so."""

    source: Literal["given", "assumed", "measured"]
    steps: dict[str, NotNegative]
    draws: NotNegative
    approximate_draws: NotNegative | None
    path: NotNegative


class PlanPart(Entry, frozen=True, kw_only=True):
    """What a run by the policy costs, and how many times as much today's format and the reference alone would.

    `replanned` is whether levels got other schemes than the audit planned, so that the paths were worked out anew.
    """

    cost: NotNegative
    saving: NotNegative | None
    saving_over_reference: NotNegative | None
    replanned: bool


class MachinePart(Entry, frozen=True, kw_only=True):
    """The class of the machine that measured: float32 and float64 exp and log differ between processors."""

    system: str
    machine: str
    vector_features: list[str]


class EvidencePart(Entry, frozen=True, kw_only=True):
    """What the policy rests on: the digest of audit.json, how it was sampled, and with what.

    `paths` are those of each level. `allowed_escapes` are the lines where values left the emulation as plain ones.
    """

    audit: Digest
    seed: Annotated[int, Meta(ge=0)]
    confidence: Share
    paths: list[Number]
    versions: dict[str, str]
    machine: MachinePart
    finished: str | None
    allowed_escapes: list[LineCount]


class LinePart(Entry, frozen=True, kw_only=True):
    """One line of the kernel's source."""

    file: str
    line: Number


class AdvicePart(Entry, frozen=True, kw_only=True):
    """Lines that, kept in the format `wide`, have `narrow` pay to a finer `level`, and whether the draws are, too.

    Lines are those of the source with the raw hash `source`. No level of the policy is run so: the kernel would have to
    be changed first, and audited anew. `operations` is the share charged at the wide cost; gains are those of `level`
    at the parameters that the audit file names.
    """

    source: Digest
    narrow: FormatName
    wide: FormatName
    lines: list[LinePart]
    draws: bool
    operations: Share
    step_cost: NotNegative
    level: LevelNumber
    gain: float | None
    gain_low: float | None
    gain_high: float | None


class PolicyDocument(Entry, frozen=True, kw_only=True):
    """One policy: `levels` has one entry for each level, coarsest first; `advice` is there where there is any."""

    schema: Literal["narrowgauge-policy/1"]
    written_by: str
    kernel: KernelPart
    ladder: LadderPart
    target: TargetPart
    domain: DomainPart
    today: FormatName
    accumulator: FormatName
    levels: Annotated[list[LevelPart], Meta(min_length=1)]
    plan: PlanPart
    finest_paying_level: dict[str, DecidedEntry]
    laws: dict[str, dict[str, LawsPart]]
    cost: CostPart
    evidence: EvidencePart
    assumed: dict[str, Plain]
    cautions: list[str]
    advice: list[AdvicePart] | UnsetType = UNSET

    def __post_init__(self) -> None:
        if [one.level for one in self.levels] != list(range(self.ladder.finest + 1)):
            raise ValueError("levels is not one entry for each level of the ladder, coarsest first")
        steps = self.ladder.coarsest_steps
        for one in self.levels:
            if one.steps != steps:
                raise ValueError(f"level {one.level} of the ladder has {steps} steps, the entry says {one.steps}")
            steps *= self.ladder.refinement
        if len(self.evidence.paths) != len(self.levels):
            raise ValueError("evidence.paths has not one number for each level")
        named = [set(self.target.rmse), set(self.target.bias_budget), *(set(one.measured) for one in self.levels)]
        if any(names != named[0] for names in named):
            raise ValueError("target.rmse, target.bias_budget and each level's measured name different quantities")


def policy_text(document: PolicyDocument) -> str:
    """Return a policy as canonical text, which `read_policy_text` reads back equal.

    Raises ValueError or TypeError where a figure is not finite or not plain.
    """
    return canonical_text(to_builtins(document))


def read_policy(path: Path) -> PolicyDocument:
    """Return the policy in a file; DocumentError says what is wrong with it, and at which path."""
    return read_policy_text(text_of(Path(path), LARGEST), str(path))


def read_policy_text(text: str, source: str) -> PolicyDocument:
    """Return the policy in a text; DocumentError says what is wrong with it, and at which path.

    Refused is what no strict JSON is, more than 16 MiB or nested more than 64 deep, unknown and missing keys, values of
    another type or out of bounds, and another version of the schema.
    """
    document = read_strict(text, source, LARGEST)
    if not isinstance(document, dict):
        raise DocumentError(source, "", f"{shown(document)} is no policy; accepted: an object")
    schema = document.get("schema")
    found = re.fullmatch(_NAME + "/([1-9][0-9]{0,8})", schema) if isinstance(schema, str) else None
    if found is None:
        raise DocumentError(source, "schema", f"{shown(schema)} is no schema of a policy; accepted: {SCHEMA}")
    if int(found[1]) > _VERSION:
        writer = document.get("written_by")
        by = shown(writer) if isinstance(writer, str) else "a version that it does not name"
        what = f"{shown(schema)} is newer than what narrowgauge {__version__} reads; the policy was written by {by}"
        raise DocumentError(source, "schema", f"{what}; accepted: {SCHEMA}, or that version of narrowgauge")
    return converted(document, PolicyDocument, source)


def _plain(value: object) -> bool:
    if isinstance(value, list):
        return all(one is not None and _plain(one) for one in value)
    if isinstance(value, int):
        return -(2**63) <= value < 2**63
    return isinstance(value, float | str | None)
