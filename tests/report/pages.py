"""Records from which the tests of the page make pages: hostile names, audits with nothing to show, a large one."""

from __future__ import annotations

import made_inside as inside
import made_records as made
from msgspec.structs import replace

from narrowgauge.record.audit import AuditRecord, FinestEntry, ReachLine
from narrowgauge.record.canonical import canonical_text

SCRIPT, BRACKETS = "<script>alert(1)</script>", "value[red]"
CONTROL = "a\x1b[31mb\u202ec\x00d\"'&<b>&amp;</b>{{ 7 * 7 }}\n</style><img src=x onerror=alert(1)>"


def sound_record() -> AuditRecord:
    """One quantity that crosses within sight, with a law in every format."""
    entry = made.quantity_entry()
    laws = dict.fromkeys(made.FORMATS, entry.accumulation["float16"])
    return made.audit_record(value=replace(entry, accumulation=laws))


def hostile_record() -> AuditRecord:
    """Names, paths, parameters and messages full of markup and control characters."""
    entry = made.quantity_entry()
    raised = made.RaisedEntry(type=SCRIPT, message=CONTROL, file=SCRIPT, line=7)
    entry = made.with_arm(entry, 1, "bfloat16", raised=raised)
    record = made.audit_record(**{SCRIPT: entry, BRACKETS: made.quantity_entry()})
    asked = {**made.ASKED, "parameters": {SCRIPT: CONTROL, BRACKETS: [1.5, CONTROL]}}
    lines = [ReachLine(file=SCRIPT, line=1, operation=BRACKETS, route="rounded", count=1), *made.REACH.lines]
    return replace(
        inside.filled(record, hostile=(SCRIPT, CONTROL)),
        kernel=replace(record.kernel, run=SCRIPT + CONTROL),
        asked=asked,
        reach=replace(made.REACH, lines=lines, remarks=[CONTROL]),
        cautions=[SCRIPT, CONTROL],
        provenance={"engine": CONTROL, SCRIPT: {BRACKETS: CONTROL}},
    )


def one_level_record() -> AuditRecord:
    """A ladder of one level: nothing adds up along it, and no law is fitted."""
    entry = made.quantity_entry()
    none = made.AccumulationEntry(error=made.NO_LAW, correction=made.NO_LAW, sentence="not fitted.")
    entry = replace(
        entry,
        levels=entry.levels[:1],
        accumulation=dict.fromkeys(made.FORMATS, none),
        orders=replace(entry.orders, level_variance=None),
    )
    return made.audit_record(value=entry)


def undecided_record() -> AuditRecord:
    """No level of any format is settled."""
    entry = made.quantity_entry()
    for level in made.LEVELS:
        for name in made.FORMATS:
            entry = made.with_arm(entry, level, name, verdict="undecided", reason="budget", paths_needed=10**7)
    open_ended = FinestEntry(level=None, cautious=None, possible=4, extrapolated=False, reason="budget")
    finest = dict.fromkeys(made.FORMATS, open_ended)
    return made.audit_record(value=replace(entry, finest_paying_level=finest))


def refused_record() -> AuditRecord:
    """No format pays, on any level."""
    refused = FinestEntry(level=None, cautious=None, possible=None, extrapolated=False, reason="edge")
    return made.audit_record(
        value=replace(made.quantity_entry(), finest_paying_level=dict.fromkeys(made.FORMATS, refused))
    )


def nonfinite_record() -> AuditRecord:
    """Nothing is finite, in no format and in no level: no figure exists."""
    entry = made.quantity_entry()
    gone = ("error_mean", "error_mean_se", "error_variance", "error_variance_se", "level_variance", "level_kurtosis")
    gone += (
        "scheme",
        "gain",
        "gain_low",
        "gain_high",
        "edge",
        "edge_low",
        "edge_high",
        "bias",
        "bias_low",
        "bias_high",
    )
    for level in made.LEVELS:
        old = entry.levels[level]
        arms = {
            name: replace(
                arm,
                **dict.fromkeys(gone),
                nonfinite=made.PATHS,
                nonfinite_bound=1.0,
                verdict=None if name == "float64" else "does not pay",
                reason=None if name == "float64" else "nonfinite",
            )
            for name, arm in old.arms.items()
        }
        fields = [name for name in old.reference.__struct_fields__ if name != "nonfinite"]
        reference = replace(old.reference, **dict.fromkeys(fields), nonfinite=old.paths)
        entry = made.with_level(
            entry, level, arms=arms, reference=reference, corrections={}, best=None, telescoping=None
        )
    nothing = dict.fromkeys(made.AllocationEntry.__struct_fields__)
    allocation = made.AllocationEntry(**{**nothing, "levels": [], "reason": "a level without a finite scheme"})
    empty = FinestEntry(level=None, cautious=None, possible=None, extrapolated=False, reason="nonfinite")
    none = made.AccumulationEntry(error=made.NO_LAW, correction=made.NO_LAW, sentence="not fitted.")
    entry = replace(
        entry,
        allocation=allocation,
        finest_paying_level=dict.fromkeys(made.FORMATS, empty),
        accumulation=dict.fromkeys(made.FORMATS, none),
        orders=replace(entry.orders, level_variance=None),
        agreement=replace(entry.agreement, agrees=None, spread=None, reason="fewer than two arms were fitted"),
    )
    return replace(made.audit_record(value=entry), reach=None, range=None)


def large_record(levels: int = 12, lines: int = 60) -> AuditRecord:
    """Two quantities on twelve levels in four formats, sixty lines of source, thirty-two scenarios."""
    entry = made.quantity_entry()
    ladder = []
    for number in range(levels):
        old = entry.levels[min(number, len(entry.levels) - 1)]
        arms = {**old.arms, "tf32": old.arms["float16"]}
        reference = replace(old.reference, level_variance=800.0 / 4.0**number, level_variance_se=8.0 / 4.0**number)
        ladder.append(replace(old, level=number, steps=2 * 2**number, h=0.5**number, arms=arms, reference=reference))
    laws = dict.fromkeys((*made.FORMATS, "tf32"), entry.accumulation["float16"])
    finest = {**entry.finest_paying_level, "tf32": entry.finest_paying_level["float16"]}
    plan = [replace(entry.allocation.levels[0], level=number) for number in range(levels)]
    entry = replace(
        entry,
        levels=ladder,
        accumulation=laws,
        finest_paying_level=finest,
        allocation=replace(entry.allocation, levels=plan),
    )
    record = made.audit_record(option=entry, output=entry)
    reach = [
        ReachLine(file="/home/user/reserve.py", line=line, operation=name, route=route, count=line)
        for line in range(1, lines + 1)
        for name, route in (("add", "rounded"), ("multiply", "rounded"), ("maximum", "exact"))
    ]
    verdict = {**record.verdict.finest_paying_level, "tf32": record.verdict.finest_paying_level["float16"]}
    record = replace(
        record,
        arms={**record.arms, "tf32": replace(record.arms["float16"], format="tf32")},
        verdict=replace(record.verdict, finest_paying_level=verdict),
        reach=replace(made.REACH, lines=reach),
    )
    return inside.filled(record, levels=levels, lines=lines)


def full_record() -> AuditRecord:
    """One quantity, and something to say in every section."""
    return inside.filled(sound_record())


EMPTY = {
    "one level": one_level_record,
    "all undecided": undecided_record,
    "everything non-finite": nonfinite_record,
    "everything wrong": made.troubled_record,
}


def written_audit(folder, record):
    """A folder that holds a record, as an audit leaves it."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "audit.json").write_text(canonical_text(record.document()), encoding="utf-8")
    return folder
