"""Where noise crosses the signal, and what the charts of it hold."""

from __future__ import annotations

import math

import made_records as made
import pages
import pytest
from msgspec.structs import replace

from narrowgauge.report.charts import extent, interval_of, power, spoken
from narrowgauge.report.crossing import crossing_chart, crossing_of, signal_of
from narrowgauge.report.parts import gain_chart, law_chart, law_shares

U = 2.0**-11


def record_of(variances, *, signal=None, law=(0.0, 1.0, 0.0), order=1.0, drift_low=0.0, fit_p=0.43):
    """An audit whose float16 has these error variances, and a signal of 4^-l unless given; with a law of its own."""
    entry = made.quantity_entry()
    signal = signal or [4.0**-level for level in made.LEVELS]
    for level, (noise, own) in enumerate(zip(variances, signal, strict=True)):
        entry = made.with_arm(entry, level, "float16", error_variance=noise)
        reference = replace(entry.levels[level].reference, level_variance=own)
        entry = made.with_level(entry, level, reference=reference)
    floor, walk, drift = law
    parts = {"floor": floor, "walk": walk, "floor_without_drift": floor, "walk_without_drift": walk}
    fitted = replace(made.LAW, **parts, drift=drift, drift_low=drift_low, fit_p=fit_p)
    one = made.AccumulationEntry(error=fitted, correction=fitted, sentence="float16: made.")
    orders = replace(entry.orders, level_variance=order)
    entry = replace(entry, accumulation={"float16": one}, orders=orders)
    return made.audit_record(value=entry)


def found(record):
    return crossing_of(record, record.quantities["value"], "float16")


def test_a_crossing_that_was_measured():
    """The first level where the noise is as large as the signal; the level before is below it."""
    one = found(record_of([0.1, 0.1, 0.1, 0.1, 0.1]))  # 4^-2 = 0.0625
    assert (one.how, one.level) == ("measured", 2)


def test_a_crossing_by_the_law():
    """u^2 n = 4 u^2 2^(l - 1) against 2^-2l: with u = 2^-11, 2^(l - 21) >= 2^-2l first at l = 7."""
    record = record_of([1e-9] * 5, order=2.0)
    one = found(record)
    assert (one.how, one.level) == ("law", 7)
    decay = signal_of(record, record.quantities["value"])
    assert decay.at(7) == pytest.approx(-7.0)


@pytest.mark.parametrize(("drift_low", "level"), [(0.0, 7), (0.01, 6)])
def test_a_drift_that_is_not_significant_does_not_go_on(drift_low, level):
    """The page goes on by the law of the verdict: u^2 n reaches 2^-2l at l = 7, and u^2 (n + n^2 / 16) at 6 already."""
    record = record_of([1e-9] * 5, law=(0.0, 1.0, 1.0 / 16.0), order=2.0, drift_low=drift_low)
    one = found(record)
    assert (one.how, one.level) == ("law", level)
    shares = law_shares(record.quantities["value"], "float16")
    assert (shares[4][3] == 0.0) == (drift_low == 0.0)


def test_a_law_that_is_rejected_is_not_drawn_beyond_the_ladder():
    """As nothing is extrapolated from it in the verdict."""
    record = record_of([1e-9] * 5, order=2.0, fit_p=0.0009)
    one, entry = found(record), record.quantities["value"]
    assert (one.how, one.reason) == ("unknown", "the law does not fit")
    fine = replace(entry.accumulation["float16"], error=made.LAW)
    chart = crossing_chart(record, replace(entry, accumulation={**entry.accumulation, "float32": fine}))
    assert [series.label for series in chart.series if series.dashed] == ["signal", "float32"]


def test_the_law_may_never_cross():
    """A floor far below a signal that does not fall."""
    one = found(record_of([1e-9] * 5, signal=[1.0] * 5, law=(1.0, 0.0, 0.0), order=0.0))
    assert (one.how, one.level, one.reason) == ("law", None, "not within 64 levels")


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"order": None}, "how the signal falls with h is not known"),
        ({"law": (None, None, None)}, "the law is not fitted"),
    ],
)
def test_what_cannot_be_extrapolated(changes, reason):
    """It is unknown, and why."""
    one = found(record_of([1e-9] * 5, **changes))
    assert (one.how, one.level, one.reason) == ("unknown", None, reason)


def test_the_dashed_lines_meet_where_the_words_say():
    """The drawing goes one level past the crossing, and there the noise is above the signal."""
    record = record_of([1e-9] * 5, order=2.0)
    chart = crossing_chart(record, record.quantities["value"])
    signal = next(one for one in chart.series if one.label == "signal")
    noise = next(one for one in chart.series if one.label == "float16")
    heights = {x: (y, dict(noise.dashed)[x]) for x, y in signal.dashed}
    assert heights[6.0][0] > heights[6.0][1]
    assert heights[7.0][0] <= heights[7.0][1]
    assert [tick.x for tick in chart.ticks][-1] == 8
    assert chart.measured_to == 4


def test_a_point_off_the_fit_is_hollow():
    """Level 0 is not among those that the law rests on."""
    record = pages.sound_record()
    chart = crossing_chart(record, record.quantities["value"])
    noise = next(one for one in chart.series if one.label == "float16")
    assert [dot.filled for dot in noise.dots] == [False, True, True, True, True]


def test_zero_noise_has_no_place_on_the_chart():
    """Its logarithm does not exist; the other levels stay."""
    record = record_of([0.0, 0.0, 1e-9, 1e-9, 1e-9])
    chart = crossing_chart(record, record.quantities["value"])
    noise = next(one for one in chart.series if one.label == "float16")
    assert [dot.x for dot in noise.dots] == [2, 3, 4]


def test_the_interval_of_a_deviation():
    """Student's t over 32 batches at 1 - 0.01 / 2 of two looks: t(31) at 0.9975 is 3.022 (a table of t, by scipy)."""
    record = pages.sound_record()
    level = record.quantities["value"].levels[0]
    low, high = interval_of(record, level, 4.0, 0.4)
    assert (high + low) / 2 == pytest.approx(1.0)
    assert (high - low) / 2 == pytest.approx(0.5 * 3.0221 * 0.1 / math.log(2.0), rel=1e-4)


def test_the_law_in_units_of_u():
    """Formats of one law lie on each other, whatever their u."""
    record = pages.sound_record()
    chart = law_chart(record, record.quantities["value"])
    heights = [[dot.y for dot in series.dots] for series in chart.series]
    assert heights[0] == pytest.approx(heights[1])
    assert heights[0] == pytest.approx([math.log2(3 + 2**level) for level in made.LEVELS])


def test_shares_of_the_law():
    """Floor 3 and walk 0.5 on 2 to 32 steps: 3 of 4 on level 0, 3 of 19 on level 4."""
    shares = law_shares(pages.sound_record().quantities["value"], "float16")
    assert shares[0] == (0, 0.75, 0.25, 0.0)
    assert shares[4] == (4, pytest.approx(3 / 19), pytest.approx(16 / 19), 0.0)


def test_gains_have_the_shape_of_their_format():
    """A split is hollow, and a level without a scheme has no row."""
    record = pages.sound_record()
    rows = gain_chart(record, record.quantities["value"]).rows
    assert [(row.scheme, row.split) for row in rows[2:4]] == [("float16 with float64", True), ("float32 alone", False)]
    troubled = made.troubled_record()
    assert [row.level for row in gain_chart(troubled, troubled.quantities["value"]).rows] == [0, 2, 3, 4]


def test_nothing_finite_has_no_charts():
    """Instead of empty axes there is none."""
    record = pages.nonfinite_record()
    entry = record.quantities["value"]
    assert (crossing_chart(record, entry), law_chart(record, entry), gain_chart(record, entry)) == (None, None, None)


def test_a_series_in_words():
    """Where it begins and ends, and how far it is extrapolated."""
    record = record_of([1e-9] * 5, order=2.0)
    chart = crossing_chart(record, record.quantities["value"])
    signal = next(one for one in chart.series if one.label == "signal")
    words = (
        "signal falls from 2 to the 0.0 at level 0 to 2 to the -4.0 at level 4, and is extrapolated to 2 to the -8.0"
    )
    assert spoken(signal, chart) == f"{words} at level 8."


def test_powers_and_extents():
    """A raised exponent; and an axis that is never flat."""
    assert power(-10.0) == "2\u207b\u00b9\u2070"
    assert extent([1.0], 2.0) == (0.0, 2.0)
    assert extent([0.0, 5.0], 2.0) == (0.0, 5.0)
