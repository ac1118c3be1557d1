"""Branches, lines, ranges, sums and scenarios made by hand, as many as a test of the page wants; none was measured."""

from __future__ import annotations

import made_watched as watched
import test_domain_text as elsewhere
import test_lines_text as sources
from msgspec.structs import replace

from narrowgauge.record.branches import BranchesEntry, MismatchEntry, PointEntry, TriedEntry, WhereEntry
from narrowgauge.record.domain import ClaimedEntry, DomainLevelEntry, ProofEntry, SideEntry, SpanEntry
from narrowgauge.record.lines import FormatLines, LineEntry, LinesEntry, PartShare, SourceLine, WhatIfEntry
from narrowgauge.record.range import LineRangeEntry

NAMES = ("reserve.py", "fine")  # of files, and what else a user writes
FORMATS = ("float16", "bfloat16", "float32", "tf32", "e4m3", "e5m2", "float64")
OUTCOMES = {3: ("undecided", "budget"), 17: ("refused", "edge"), 35: ("refused", "nonfinite")}


def filled(record, *, levels=5, lines=6, scenarios=32, hostile=NAMES):
    """The record with all that the sections inside the kernel and elsewhere can show."""
    file, words = hostile
    arms = [arm for arm in record.verdict.finest_paying_level if arm in record.arms]
    quantities = list(record.quantities)
    return replace(
        record,
        branches=branches(arms, quantities, words, file),
        lines=line_studies(arms, quantities, lines, words, file),
        range=replace(record.range, watched=ranges(arms, lines, file)),
        averaging=sums_of(quantities, levels),
        domain=domain(levels, scenarios, words, file),
    )


def branches(arms, quantities, words=NAMES[1], file=NAMES[0]):
    """A low branch that differs in one format, and a path that others influence."""
    tried = [
        TriedEntry(
            arm=arm, level=level, paths=1024, varied=1024, batches=[1, 7], orders=["C"], threads=2, repeats=1, changed=3
        )
        for arm in arms
        for level in (0, 2)
    ]
    point = PointEntry(kind="operation", file=file, line=7, operation=words, text=f"{file}:7 {words} of 1.5 and 2")
    where = WhereEntry(low=point, correction=point, ulps=1.0, incomplete=None, cause="fused multiply-add")
    differs = MismatchEntry(
        arm=arms[0], level=2, quantity=quantities[0], condition="branches", function=None, detail=None, wide=None,
        paths=1024, differing=12, ulps_largest=1.0, ulps_median=1.0, bias=1e-4, bias_low=-1e-4, bias_high=3e-4,
        of_rmse=0.002, where=where, explanation=words, explained=12, numpys_own=False, splits="not admissible",
    )  # fmt: skip
    influenced = replace(differs, condition="influence", function=file, detail=words, where=None)
    return BranchesEntry(
        low=f"{file}:cheap", correction=f"{file}:{words}", tried=tried, mismatches=[differs, influenced], casts=[],
        raised={arms[1]: words}, remarks=[words],
    )  # fmt: skip


def line_studies(arms, quantities, lines, words=NAMES[1], file=NAMES[0]):
    """A study of each arm, every second line of which matters; a widening, and a what-if."""
    parts = [LineEntry(kind="line", file=file, line=n, role="state", operations=1 / lines) for n in range(1, lines + 1)]
    parts += [LineEntry(kind="draws", file=None, line=None, role=None, operations=0.1)]
    figures = [0.9 / len(parts) if number % 2 == 0 else 0.001 for number in range(len(parts))]
    one = sources.lines_entry().formats["float16"].quantities["value"]
    shares = replace(
        one,
        parts=[
            PartShare(part=number, error=sources.share(value), correction=sources.share(value))
            for number, value in enumerate(figures)
        ],
    )
    what_if = WhatIfEntry(
        name="stochastic rounding", step_cost=0.25, level=None, possible=None,
        gain=None, gain_low=None, gain_high=None, edge=None, edge_low=None, edge_high=None,
    )  # fmt: skip
    study = FormatLines(
        level=3, steps=8, paths=16384, wide="float32", parts=parts, quantities=dict.fromkeys(quantities, shares),
        plain=sources.widening(level=2), widenings=[sources.widening(0, 2, level=4, operations=0.125, possible=5)],
        what_ifs=[what_if], reason=None,
    )  # fmt: skip
    longest = f"        state = state + drift * step  # {words} " + "and more to say of it " * 4
    source = [SourceLine(file=file, line=n, text="\tx = x + dx" if n % 5 else longest) for n in range(1, lines + 1)]
    return LinesEntry(formats=dict.fromkeys(arms, study), source=[*source, later(file, lines)], reason=None)


def later(file, lines):
    """A line behind a gap."""
    return SourceLine(file=file, line=lines + 40, text="    return x")


def ranges(arms, lines, file=NAMES[0]):
    """Three operations on each line of three levels in each arm, one of them past the ends of float16."""
    own = {arm: watched.line_arm(9, 2, additions=16384, lost=512, first_lost=11) for arm in arms}
    small = {arm: watched.line_arm(-1, -3, subnormals=600, underflows=40, overflows=1) for arm in arms}
    found = []
    for level, old in zip((0, 3, 6), (*watched.WATCHED.levels, watched.WATCHED.levels[-1]), strict=True):
        results = [
            LineRangeEntry(
                file=file, line=line, operation=name, results=16384, smallest=-12 - line % 7, largest=6 + line % 11,
                arms=small if (line % 9, name) == (4, "multiply") else own,
            )
            for line in range(1, lines + 1)
            for name in ("add", "multiply", "subtract")
        ]  # fmt: skip
        states = {arm: old.arms.get(arm, watched.QUIET) for arm in arms}
        found.append(replace(old, level=level, arms=states, lines=results))
    return replace(watched.WATCHED, levels=found)


def sums_of(quantities, levels):
    """Sums of paths and of corrections on each level, in all formats there are."""
    formats = {name: (watched.sums(31.4, 198), watched.sums(0.002, 6_710_787_163)) for name in FORMATS[:-1]}
    formats["float64"] = (watched.sums(1e-9, 2_287_461_761_946), watched.sums(1e-12, None))
    entries = []
    for level in range(levels):
        low = watched.averaged(level, 45_210, formats)
        entries += [low, replace(low, branch="correction", wide="float32", paths=150)]
    return replace(watched.AVERAGING, quantities=dict.fromkeys(quantities, entries))


def domain(levels, scenarios, words=NAMES[1], file=NAMES[0]):
    """A box of two parameters in which a corner is refused and few drawn scenarios do not pass."""
    names, found = (file, f"spot {words}"), []
    for number in range(1, scenarios + 5):
        one = elsewhere.scenario(number, 77.0, OUTCOMES.get(number, elsewhere.PASSED))
        ladder = [replace(one.levels[0], level=level) for level in range(levels)]
        values = dict(zip(names, (0.1 + number / 100, 50.0 + number), strict=True))
        kind = "drawn" if number <= scenarios else "corner"
        found.append(replace(one, kind=kind, parameters=values, levels=ladder))
    found[-1] = replace(found[-1], outcome="refused", reason="reference", message=f"the kernel raised {words}")
    sides = {name: SideEntry(low=0.1, high=200.0, scale="log", audited=1.0) for name in names}
    spans = {names[0]: SpanEntry(low=0.1, high=100.00004), names[1]: SpanEntry(low=0.1, high=200.0)}
    worst = [
        DomainLevelEntry(
            level=level, scheme=elsewhere.SCHEME, outcome="refused", reason="nonfinite", edge_low=0.9996,
            decided_by=35, arms={},
        )
        for level in range(levels)
    ]  # fmt: skip
    proof = ProofEntry(confidence=0.95, drawn=32, passed=30, fails_below=0.18, claimed_fails_below=0.2)
    entry = elsewhere.domain(
        *found, claimed=ClaimedEntry(parameters=spans, share=0.9, scenarios=30, levels=worst), proof=proof
    )
    return replace(entry, sides=sides, levels=worst)
