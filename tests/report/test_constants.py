"""Constants in words: grouped by line, formats that agree together, the rest counted."""

from __future__ import annotations

import made_records as made
from rendering import HOSTILE

from narrowgauge.record.audit import RangeEntry
from narrowgauge.report.constants import constant_lines, no_constants


def shown(*entries):
    return constant_lines(RangeEntry(constants=list(entries)))


def test_one_line_of_the_kernel_is_one_item():
    """Kinds one after the other; formats in which the same becomes the same stand together."""
    assert constant_lines(made.RANGE) == [
        "parameters.curve: 70000 becomes infinite in float16",
        "reserve.py:7: 1e-08 becomes 0 in float16; 3e-05 becomes 2.998e-05, subnormal, in float16",
        "reserve.py:9: 1.5e-12, 3e-12 and 4,094 further values become 0 in float16",
        "reserve.py:12: 1e-45 becomes 0 in float16 and bfloat16; 1e-45 becomes 1.401e-45, subnormal, in float32",
    ]


def test_numbers_of_values():
    """One, two, and more than two that share a line and what becomes of them; one that moves has its new value."""
    entry = made.constant_entry
    assert shown(entry(3, "float16", "zero", (1e-8, 0.0), (1e-9, 0.0))) == [
        "reserve.py:3: 1e-08 and 1e-09 become 0 in float16"
    ]
    assert shown(entry(3, "float16", "subnormal", (2e-5, 2e-5), (3e-5, 3e-5), (4e-5, 4e-5))) == [
        "reserve.py:3: 2e-05, 3e-05 and 1 further value are subnormal in float16"
    ]
    assert shown(entry(3, "float16", "moved", (6.1033e-5, 2.0**-14))) == [
        "reserve.py:3: 6.1033e-05 becomes 6.104e-05 in float16"
    ]
    assert shown(entry(None, "float16", "zero", (1e-8, 0.0))) == [
        "outside the kernel's file: 1e-08 becomes 0 in float16"
    ]


def test_ten_lines_and_the_rest_counted():
    """Eleven lines are ten and one more; none is left out in silence."""
    entries = [made.constant_entry(line, "float16", "zero", (1e-8, 0.0)) for line in range(1, 13)]
    assert len(shown(*entries[:10])) == 10
    assert shown(*entries[:11])[10:] == ["1 further line; audit.json has them all"]
    assert shown(*entries)[10:] == ["2 further lines; audit.json has them all"]


def test_none_says_what_was_tested():
    """No constant is a finding of its own; no run is not the same."""
    assert shown() == constant_lines(None) == []
    assert no_constants(RangeEntry(constants=[])).startswith("None: every constant that meets the state becomes a ")
    assert no_constants(None).startswith("Not known")


def test_hostile_names():
    """Names of parameters and formats do not reach a terminal as they are."""
    (line,) = shown(made.constant_entry(None, HOSTILE, "zero", (1e-8, 0.0), parameter=HOSTILE))
    assert line.isprintable()
