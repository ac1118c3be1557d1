"""What a reader is told about approximate draws: which part costs the accuracy, and how good the draws are."""

from __future__ import annotations

import made_records as made
import pytest
from msgspec.structs import replace
from rendering import flat, rendered
from test_text import check_golden

from narrowgauge.record.draws import DrawsEntry, OrderEntry, PartsEntry, SeparationEntry
from narrowgauge.report.settings import approximate_draws
from narrowgauge.report.text import audit_text, verdict_text

NAME, ALONE = "float16/approximate", "float64/approximate"
DRAWS = DrawsEntry(
    approximate="constant",
    cells=1024,
    intervals=None,
    degree=None,
    mean=0.0,
    variance=0.99985,
    mean_square_error=1.497e-4,
)
# Per level: variances of arithmetic, draws and both, and which is larger.
VARIANCES = (
    (1e-6, 4e-4, 4.01e-4, "draws"),
    (2e-6, 2e-4, 2.02e-4, "draws"),
    (4e-6, 4.2e-6, 8.2e-6, None),
    (8e-6, 2e-6, 1e-5, "arithmetic"),
    (None, 1e-6, None, None),
)
ORDERS = {
    NAME: OrderEntry(slope=None, slope_low=None, slope_high=None, levels=[], reason="too few usable levels"),
    ALONE: OrderEntry(slope=0.9876, slope_low=0.95, slope_high=1.02, levels=[3, 4], reason=None),
}


def parts_entry(level):
    arithmetic, draws, both, larger = VARIANCES[level]
    errors = dict.fromkeys(("arithmetic_se", "draws_se", "both_se", "ratio", "ratio_low", "ratio_high"))
    return PartsEntry(level=level, arithmetic=arithmetic, draws=draws, both=both, larger=larger, **errors)


def record(separation=None):
    """The audit of one quantity with float16 tried with both kinds of draws; no figure was measured."""
    entry = made.quantity_entry()
    levels = [
        replace(
            one,
            arms={**one.arms, NAME: one.arms["float16"]},
            corrections={**one.corrections, f"{NAME}:float64": made.CORRECTION},
        )
        for one in entry.levels
    ]
    finest = {**entry.finest_paying_level, NAME: entry.finest_paying_level["float16"]}
    found = separation or SeparationEntry(
        parts={"float16": [parts_entry(level) for level in made.LEVELS]}, orders=ORDERS
    )
    entry = replace(entry, levels=levels, finest_paying_level=finest, separation=found)
    plain = made.audit_record(value=entry)
    arms = {name: replace(plain.arms["float16"], draws="approximate") for name in (NAME, ALONE)}
    verdict = {**plain.verdict.finest_paying_level, NAME: plain.verdict.finest_paying_level["float16"]}
    return replace(
        plain,
        arms={**plain.arms, **arms},
        verdict=replace(plain.verdict, finest_paying_level=verdict),
        draws=DRAWS,
    )


@pytest.mark.parametrize("width", [60, 80])
def test_golden(width):
    """An audit with approximate draws reads as it did when somebody last looked at it."""
    check_golden(f"approximate-{width}", rendered(audit_text(record(), None), width))


def test_which_part_costs_the_accuracy_is_said_by_level():
    """By the intervals alone: a level where neither is larger is in no list, and in the table it is not settled."""
    words = flat(audit_text(record(), None))
    assert (
        "puts more into the correction: the approximate draws on levels 0 and 1 and the arithmetic on level 3." in words
    )
    assert (
        "with both not to be told (too few usable levels) and with draws alone 0.988 (0.950 to 1.02) (levels 3 and 4)."
        in (words)
    )


def test_a_part_that_is_not_there_is_explained():
    """As every en dash is."""
    words = flat(audit_text(record(), None))
    assert "\N{EN DASH} on level 4: the kernel raised there, or has no finite variance." in words


def test_no_part_is_named_where_no_interval_says_so():
    """The orders stay."""
    unsettled = [replace(parts_entry(level), larger=None) for level in made.LEVELS]
    words = flat(audit_text(record(SeparationEntry(parts={"float16": unsettled}, orders=ORDERS)), None))
    assert "puts more" not in words
    assert "Order in h of the correction's variance" in words


def test_rounding_noise_is_that_of_exact_draws():
    """The table of signal and noise has no column for an arm whose error is not one of rounding alone."""
    text = rendered(audit_text(record(), None), 120)
    head = text[text.index("Signal and noise of value") :].split("\n\n")[0]
    assert "float16" in head
    assert "approximate" not in head


def test_nothing_of_it_without_approximate_draws():
    """An audit without them has none of the words."""
    text = rendered(audit_text(made.audit_record(), None))
    assert "Not measured in this audit: approximate draws," in text
    assert text.count("pproximate") == 1


def test_the_short_form_names_the_arm():
    """Its verdict is a sentence like that of a format."""
    assert "float16/approximate: finest level where it still pays" in flat(verdict_text(record(), None))


@pytest.mark.parametrize(
    ("sizes", "words"),
    [
        ({}, "piecewise constant on 1,024 cells; mean square error 1.50e-04, mean 0, variance 0.99985."),
        (
            {"approximate": "linear", "cells": None, "intervals": 16},
            "piecewise linear on 16 dyadic intervals either side of 1/2; mean square error 1.50e-04, mean 0, "
            "variance 0.99985.",
        ),
        (
            {"approximate": "polynomial", "cells": None, "degree": 9},
            "a polynomial of degree 9; mean square error 1.50e-04, mean 0, variance 0.99985.",
        ),
        (
            {"approximate": "cheap\x1b[31m.py:f", "cells": None, "mean": 0.001},
            "by cheap[31m.py:f; mean square error 1.50e-04, mean 0.00100, variance 0.99985.",
        ),
    ],
)
def test_what_the_draws_are(sizes, words):
    """Kind, size and how good they are; a user's function by its name, which cannot colour anything."""
    assert approximate_draws(replace(DRAWS, **sizes)) == words
