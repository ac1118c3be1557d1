"""Ranges and sums made by hand, for the tests of the text; no figure in them was measured."""

from __future__ import annotations

from narrowgauge.record.averaging import AveragedEntry, AveragingEntry, FormatSumsEntry, SumEntry
from narrowgauge.record.range import (
    LineArmEntry,
    LineRangeEntry,
    NonfiniteEntry,
    RangeLevelEntry,
    ShareEntry,
    ShiftEntry,
    ShiftLevelEntry,
    WatchedArmEntry,
    WatchedEntry,
)


def share(count: int, of: int, low: float, high: float) -> ShareEntry:
    return ShareEntry(count=count, of=of, share=count / of, share_low=low, share_high=high)


def line_arm(above: int, below: int, **counts: int) -> LineArmEntry:
    given = {"overflows": 0, "subnormals": 0, "underflows": 0, "additions": 0, "lost": 0, "first_lost": None}
    return LineArmEntry(
        headroom_above=above,
        headroom_below=below,
        cancelled_mean=None,
        cancelled_most=None,
        **{**given, **counts},  # type: ignore[arg-type]
    )


NOTHING = share(0, 5120, 0.0, 0.021)
QUIET = WatchedArmEntry(lost=NOTHING, below=NOTHING, overflows=0, first_nonfinite=None, stopped=None)
INFINITE = NonfiniteEntry(
    file="reserve.py", line=9, operation="multiply", kind="infinite", step=4, path=17, operands=[300.0, 400.0]
)

WATCHED = WatchedEntry(
    confidence=0.99,
    levels=[
        RangeLevelEntry(
            level=0,
            steps=2,
            paths=256,
            arms={"float16": QUIET, "bfloat16": QUIET, "float32": QUIET},
            lines=[
                LineRangeEntry(
                    file="reserve.py",
                    line=7,
                    operation="add",
                    results=1024,
                    smallest=-6,
                    largest=6,
                    arms={"float16": line_arm(9, 8), "bfloat16": line_arm(121, 120), "float32": line_arm(121, 120)},
                )
            ],
        ),
        RangeLevelEntry(
            level=4,
            steps=32,
            paths=256,
            arms={
                "float16": WatchedArmEntry(
                    lost=share(512, 16384, 0.0291, 0.0334),
                    below=share(640, 32768, 0.0121, 0.0284),
                    overflows=1,
                    first_nonfinite=INFINITE,
                    stopped=None,
                ),
                "bfloat16": WatchedArmEntry(
                    lost=share(4096, 16384, 0.244, 0.256),
                    below=NOTHING,
                    overflows=0,
                    first_nonfinite=None,
                    stopped="the kernel raised ValueError: not today.",
                ),
                "float32": QUIET,
            },
            lines=[
                LineRangeEntry(
                    file="reserve.py",
                    line=7,
                    operation="add",
                    results=16384,
                    smallest=-12,
                    largest=6,
                    arms={
                        "float16": line_arm(9, 2, additions=16384, lost=512, first_lost=11),
                        "bfloat16": line_arm(121, 114, additions=16384, lost=4096, first_lost=3),
                        "float32": line_arm(121, 114, additions=16384),
                    },
                ),
                LineRangeEntry(
                    file="reserve.py",
                    line=9,
                    operation="multiply",
                    results=16384,
                    smallest=-17,
                    largest=16,
                    arms={
                        "float16": line_arm(-1, -3, subnormals=600, underflows=40, overflows=1),
                        "bfloat16": line_arm(111, 109),
                        "float32": line_arm(111, 109),
                    },
                ),
            ],
        ),
    ],
    shifts={
        "float16": ShiftEntry(
            exponent=2,
            levels=[
                ShiftLevelEntry(
                    level=4,
                    overflows=1,
                    subnormals=600,
                    underflows=40,
                    error_variance={"value": None, "delta": 2.0},
                    shifted_overflows=0,
                    shifted_subnormals=1100,
                    shifted_underflows=44,
                    shifted_error_variance={"value": 4.0, "delta": 1.5},
                )
            ],
            stopped=None,
        )
    },
)


def sums(share: float | None, largest: int | None, reason: str | None = None) -> SumEntry:
    known = None if share is None else 0.0
    return SumEntry(
        bias=known,
        deviation=known,
        share=share,
        variance_bias=known,
        variance_deviation=known,
        largest=largest,
        reason=reason,  # type: ignore[arg-type]
    )


def averaged(level: int, paths: int | None, formats: dict[str, tuple[SumEntry, SumEntry]]) -> AveragedEntry:
    return AveragedEntry(
        level=level,
        branch="low",
        narrow="float16",
        wide=None,
        paths=paths,
        mean=10.0,
        standard_error=None if paths is None else 0.1,
        formats={name: FormatSumsEntry(running=one, pairwise=two) for name, (one, two) in formats.items()},
        reason=None,
    )


AVERAGING = AveragingEntry(
    share=0.1,
    paths=1024,
    quantities={
        "value": [
            averaged(
                0,
                45_210,
                {
                    "float16": (sums(31.4, 198), sums(None, 6249, "range")),
                    "float32": (sums(0.21, 20_436), sums(0.002, 6_710_787_163_692)),
                    "float64": (sums(1e-9, 2_287_461_761_946), sums(1e-12, None)),
                },
            ),
            averaged(
                1,
                900,
                {
                    "float16": (sums(0.2, 240), sums(0.02, 9000)),
                    "float32": (sums(0.01, 30_000), sums(0.001, 6_710_787_163_692)),
                    "float64": (sums(1e-9, 2_287_461_761_946), sums(1e-12, None)),
                },
            ),
        ]
    },
)
