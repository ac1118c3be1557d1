"""Audit records made by hand, for the tests of the text; no figure in them was measured."""

from __future__ import annotations

from made_watched import AVERAGING, WATCHED
from msgspec.structs import replace

from narrowgauge.record.audit import (
    SCHEMA,
    AccumulationEntry,
    AgreementEntry,
    AllocationEntry,
    ArithmeticEntry,
    ArmEntry,
    AuditRecord,
    BestEntry,
    CommonLevelEntry,
    CommonPlanEntry,
    ConstantEntry,
    ConstantValue,
    CorrectionEntry,
    DecidedEntry,
    DecisionEntry,
    FaultEntry,
    FinestEntry,
    KernelEntry,
    LawEntry,
    LevelEntry,
    LineCount,
    OrdersEntry,
    PlanEntry,
    QuantityEntry,
    RaisedEntry,
    RangeEntry,
    ReachEntry,
    ReachLine,
    ReferenceEntry,
    RulesEntry,
    SchemeEntry,
    TelescopingEntry,
    TrialEntry,
    VerdictEntry,
)

FORMATS = ("float16", "bfloat16", "float32")
LEVELS = range(5)
PATHS = 32768
SPLIT = {name: SchemeEntry(kind="split", narrow=name, wide="float64") for name in FORMATS}
ALONE = {name: SchemeEntry(kind="alone", narrow=name, wide=None) for name in (*FORMATS, "float64")}

# Per format and level: edge, its bounds, verdict and reason.
JUDGED = {
    "float16": (
        (1.98, 1.97, 1.99, "pays", None),
        (1.912, 1.9, 1.92, "pays", None),
        (1.62, 1.55, 1.7, "pays", None),
        (1.0497, 0.9996, 1.0501, "undecided", "budget"),
        (0.81, 0.78, 0.84, "does not pay", "edge"),
    ),
    "bfloat16": (
        (1.8, 1.7, 1.9, "pays", None),
        (1.4, 1.3, 1.5, "undecided", "bias"),
        (1.2, 1.1, 1.3, "pays", None),
        (None, None, None, "does not pay", "bias"),
        (None, None, None, "does not pay", "nonfinite"),
    ),
    "float32": tuple((2.0, 2.0, 2.0, "pays", None) for _ in LEVELS),
}
# Per format and level: the shift of the mean and its bounds.
BIAS = {name: [(0.0, 0.0, 0.0)] * 5 for name in FORMATS}
BIAS["bfloat16"] = [*[(0.0001, -0.00013, 0.00033)] * 3, *[(0.0012, 0.0011, 0.0013)] * 2]


def arm_entry(name, level):
    edge, low, high, verdict, reason = JUDGED[name][level]
    u = {"float16": 2.0**-11, "bfloat16": 2.0**-8, "float32": 2.0**-24}[name]
    return ArmEntry(
        error_mean=u,
        error_mean_se=u / 10,
        error_variance=u**2 * (3 + 2**level),
        error_variance_se=u**2 / 10,
        level_variance=4.0**-level,
        level_kurtosis=3.0,
        nonfinite=0,
        nonfinite_bound=4.605 / PATHS,
        raised=None,
        scheme=(ALONE if name == "float32" else SPLIT)[name] if edge or reason == "bias" else None,
        gain=edge,
        gain_low=low,
        gain_high=high,
        edge=edge,
        edge_low=low,
        edge_high=high,
        bias=BIAS[name][level][0],
        bias_low=BIAS[name][level][1],
        bias_high=BIAS[name][level][2],
        verdict=verdict,
        reason=reason,
        paths_needed=1_234_567 if reason == "budget" else None,
        admitted_rmse=None,
    )


REFERENCE_ARM = replace(
    arm_entry("float32", 0), error_mean=0.0, error_variance=0.0, scheme=None, edge=None, verdict=None, reason=None
)
CORRECTION = CorrectionEntry(
    mean=0.0,
    mean_se=1e-6,
    variance=1e-6,
    variance_se=1e-8,
    kurtosis=3.1,
    effective_size=12.3,
    events=PATHS,
    counted=False,
    breakeven_cost_ratio=0.87,
)


def level_entry(level):
    return LevelEntry(
        level=level,
        steps=2 * 2**level,
        h=0.5**level,
        paths=PATHS * 2 if level == 3 else PATHS,
        blocks=1,
        telescoping=None if level == 0 else TelescopingEntry(difference=0.001, se=0.002, sound=True),
        reference=ReferenceEntry(
            mean=29.1,
            mean_se=0.1,
            variance=800.0,
            level_mean=0.1,
            level_mean_se=0.01,
            level_variance=800.0 / 4**level,
            level_variance_se=1.0,
            level_kurtosis=3.0 + level,
            nonfinite=0,
        ),
        arms={"float64": REFERENCE_ARM, **{name: arm_entry(name, level) for name in FORMATS}},
        corrections={f"{name}:float64": CORRECTION for name in FORMATS},
        best=BestEntry(
            kind="split" if level < 3 else "alone",
            narrow="float16" if level < 3 else "float32",
            wide="float64" if level < 3 else None,
            gain=2.5 - level / 10,
            gain_low=2.4 - level / 10,
            gain_high=2.6 - level / 10,
            bias=0.0,
        ),
    )


LAW = LawEntry(
    floor=3.0,
    floor_low=2.9,
    floor_high=3.1,
    walk=0.5,
    walk_low=0.49,
    walk_high=0.51,
    drift=0.0,
    drift_low=0.0,
    drift_high=0.001,
    slope=0.9996,
    slope_low=0.97,
    slope_high=1.03,
    deviation=1.234,
    fit_p=0.43,
    floor_without_drift=3.0,
    walk_without_drift=0.5,
    levels=[1, 2, 3, 4],
    reason=None,
)
NO_LAW = LawEntry(
    **dict.fromkeys(set(LAW.__struct_fields__) - {"levels", "reason"}), levels=[], reason="too few levels"
)


BRANCHES = [
    {"level": 0, "scheme": SPLIT["float16"], "paths": 1_175_885, "correction_paths": 1878, "bounded": True},
    {"level": 1, "scheme": ALONE["float32"], "paths": 228_676, "correction_paths": None, "bounded": False},
]


def quantity_entry():
    finest = {
        "float16": FinestEntry(level=2, cautious=None, possible=3, extrapolated=False, reason="budget"),
        "bfloat16": FinestEntry(level=0, cautious=None, possible=2, extrapolated=False, reason="bias"),
        "float32": FinestEntry(
            level=4, cautious=None, possible=None, extrapolated=False, reason="or finer, not extrapolated"
        ),
    }
    return QuantityEntry(
        levels=[level_entry(level) for level in LEVELS],
        accumulation={
            "bfloat16": AccumulationEntry(
                error=NO_LAW, correction=NO_LAW, sentence="bfloat16: the law is not fitted, too few usable levels."
            ),
            "float16": AccumulationEntry(
                error=LAW,
                correction=LAW,
                sentence="float16: the walk of step roundings (delta^2/h) rules on every level.",
            ),
        },
        agreement=AgreementEntry(agrees=True, spread=0.0321, reason=None),
        orders=OrdersEntry(level_variance=1.98, level_mean=None),
        finest_paying_level=finest,
        allocation=AllocationEntry(
            rmse=0.05,
            levels=[
                PlanEntry(**BRANCHES[0], cost=9000.0),
                PlanEntry(**BRANCHES[1], cost=0.01),
            ],
            cost=9000.01,
            saving=3.146,
            saving_low=3.1,
            saving_high=3.2,
            saving_over_reference=3.146,
            saving_over_reference_low=3.1,
            saving_over_reference_high=3.2,
            weak_error=0.04999,
            reason=None,
        ),
    )


ASKED = {
    "kernel": {"run": "reserve.py:value", "takes": "increments", "factors": 1, "coupling": "sum"},
    "parameters": {},
    "ladder": {"horizon": 1.0, "coarsest_steps": 2, "refinement": 2, "finest": 4},
    "target": {"rmse": 0.05, "bias_share": 0.025, "worthwhile": 1.05, "largest_correction": None},
    "formats": {"today": "float64", "narrow": list(FORMATS), "wide": ["float32", "float64"], "schemes": ["alone"]},
    "cost": {"float64": 1.0, "float32": 0.5, "float16": 0.25, "bfloat16": 0.25, "draws": 0.0, "path": 0.0},
    "sampling": {"block": 32768, "paths": 32768, "most_paths": 65536, "confidence": 0.99, "seed": 1},
    "assumed": ["kernel.factors", "target.largest_correction", "formats.narrow", "cost.draws", "sampling.confidence"],
}
REACH = ReachEntry(
    operations=46,
    rounded=40,
    share=40 / 42,
    decisions=3,
    lines=[
        ReachLine(file="/home/user/reserve.py", line=7, operation="add", route="rounded", count=16),
        ReachLine(file="/home/user/reserve.py", line=7, operation="multiply", route="rounded", count=24),
        ReachLine(file="/home/user/reserve.py", line=12, operation="sum", route="whole", count=2),
        ReachLine(file="/home/user/reserve.py", line=12, operation="maximum", route="exact", count=4),
    ],
    integers=[LineCount(file="reserve.py", line=8, count=4)],
    changed_decisions=[
        DecisionEntry(file="reserve.py", line=8, arm="float16", reference_count=3, reference_true=2, count=4, true=1)
    ],
    allowed_escapes=[LineCount(file="reserve.py", line=9, count=1)],
    remarks=["/home/user/reserve.py:12: the sum along the paths stays in float64"],
)


def constant_entry(line, arm, kind, *values, distinct=None, parameter=None):
    """Constants of one line; each value a pair of it and what it became."""
    return ConstantEntry(
        file=None if line is None else "reserve.py",
        line=line,
        parameter=parameter,
        arm=arm,
        kind=kind,
        count=2 * (distinct or len(values)),
        distinct=distinct or len(values),
        values=[ConstantValue(value=value, became=became, ulps=1.0, count=2) for value, became in values],
    )


RANGE = RangeEntry(
    watched=WATCHED,
    constants=[
        constant_entry(None, "float16", "infinite", (7e4, None), parameter="curve"),
        constant_entry(7, "float16", "zero", (1e-8, 0.0)),
        constant_entry(7, "float16", "subnormal", (3e-5, 2.998113632202148e-05)),
        constant_entry(
            9, "float16", "zero", *((number * 1e-12, 0.0) for number in (1.5, 3.0, 4.5, 6.0, 7.5)), distinct=4096
        ),
        constant_entry(12, "float16", "zero", (1e-45, 0.0)),
        constant_entry(12, "bfloat16", "zero", (1e-45, 0.0)),
        constant_entry(12, "float32", "subnormal", (1e-45, 1.401298464324817e-45)),
    ],
)


RULES = RulesEntry(
    telescoping_se=3.3, least_effective_size=50, worthwhile=1.05, bias_share=0.025, levels_sharing=len(LEVELS)
)


def common_plan(quantities):
    """A plan for all quantities: the last one needs the most corrections, the first one the most of all else."""
    first, last = next(iter(quantities)), list(quantities)[-1]
    return CommonPlanEntry(
        levels=[
            CommonLevelEntry(**BRANCHES[0], cost=9000.0, paths_decided_by=first, correction_paths_decided_by=last),
            CommonLevelEntry(**BRANCHES[1], cost=0.01, paths_decided_by=first, correction_paths_decided_by=None),
        ],
        cost=9000.01,
        saving=2.9996,
        saving_over_reference=3.146,
        reason=None,
    )


def audit_record(**quantities):
    """A record of the given quantities, or of two."""
    quantities = quantities or {"option": quantity_entry(), "output": quantity_entry()}
    decider = next(iter(quantities))
    return AuditRecord(
        schema=SCHEMA,
        kernel=KernelEntry(run="reserve.py:value", fingerprint="sha256:invented"),
        asked=ASKED,
        rules=RULES,
        arms={
            name: ArithmeticEntry(
                format=name, rounding="nearest", subnormals="kept", fused=False, draws="exact", widened=[]
            )
            for name in ("float64", *FORMATS)
        },
        quantities=quantities,
        verdict=VerdictEntry(
            sound=True,
            finest_paying_level={
                name: decided(quantities[decider].finest_paying_level[name], decider) for name in FORMATS
            },
            schemes=[SPLIT["float16"], *[ALONE["float32"]] * 4],
            plan=common_plan(quantities),
        ),
        reach=REACH,
        range=RANGE,
        averaging=AVERAGING,
        cautions=["A verdict is evidence, not approval.", "The emulation does not know a vendor's instructions."],
        provenance={},
    )


def decided(entry, quantity):
    fields = {name: getattr(entry, name) for name in entry.__struct_fields__}
    return DecidedEntry(**fields, decided_by=quantity)


def with_level(entry, number, **changes):
    """A quantity one level of which is changed."""
    return replace(entry, levels=[replace(one, **changes) if one.level == number else one for one in entry.levels])


def with_arm(entry, number, name, **changes):
    """A quantity one format of which is changed on one level."""
    arms = next(one.arms for one in entry.levels if one.level == number)
    return with_level(entry, number, arms={**arms, name: replace(arms[name], **changes)})


def troubled_record():
    """Everything that can be wrong at once: ladder, dropped paths, exceptions, non-finite values, rare corrections."""
    entry = quantity_entry()
    unsound = TelescopingEntry(difference=0.1234, se=0.0123, sound=False)
    entry = with_level(entry, 2, telescoping=unsound)
    reference = replace(entry.levels[1].reference, nonfinite=3)
    entry = with_level(entry, 1, reference=reference, best=None)
    raised = RaisedEntry(type="ZeroDivisionError", message="division by zero", file="/home/user/reserve.py", line=7)
    gone = dict.fromkeys(
        ("error_mean", "error_variance", "scheme", "edge", "edge_low", "edge_high", "bias", "nonfinite_bound")
    )
    for level in LEVELS:
        entry = with_arm(entry, level, "float16", **gone, raised=raised, verdict="does not pay", reason="raised")
    entry = with_arm(entry, 2, "bfloat16", verdict="undecided", reason="kurtosis", paths_needed=123_456)
    entry = with_arm(entry, 4, "bfloat16", error_variance=None, nonfinite=32_000, nonfinite_bound=0.978)
    entry = with_arm(entry, 3, "bfloat16", nonfinite=2, nonfinite_bound=0.0001)
    empty = FinestEntry(level=None, cautious=None, possible=None, extrapolated=False, reason="raised")
    finest = {**entry.finest_paying_level, "float16": empty}
    nothing = dict.fromkeys(AllocationEntry.__struct_fields__)
    allocation = AllocationEntry(**{**nothing, "levels": [], "reason": "a level without a finite scheme"})
    agreement = AgreementEntry(agrees=None, spread=None, reason="fewer than two arms were fitted")
    record = audit_record(
        value=replace(entry, finest_paying_level=finest, allocation=allocation, agreement=agreement),
    )
    asked = {**ASKED, "target": None, "assumed": ["target.worthwhile", "cost.float64", "cost.float32"]}
    unsound = replace(record.verdict, sound=False)
    return replace(record, asked=asked, reach=None, range=None, averaging=None, verdict=unsound)


def trial_entry(*, escapes):
    """A trial run in which nothing escapes, or two formats are stopped."""
    message = (
        "/home/user/reserve.py:9: float() takes a value out of the emulated arithmetic; accepted: leave it as it is"
    )
    faults = [FaultEntry(arm=name, kind="escape", message=message) for name in ("float16", "float32")]
    return TrialEntry(identical=True, reach=REACH, range=RANGE, faults=faults if escapes else [])
