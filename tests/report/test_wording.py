"""Figures and words: no figure crosses a threshold by being rounded, and no name moves the cursor."""

from __future__ import annotations

import math

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from narrowgauge.report.wording import (
    at_most,
    clean,
    clean_lines,
    count,
    duration,
    figure,
    interval,
    joined,
    levels_named,
    million,
    percent,
    setting_value,
    shown_edge,
)

THRESHOLDS = st.sampled_from([0.0, 1.0, 1.05, 3.3, 0.05, 100.0]) | st.floats(1e-6, 1e6)
NEAR = st.builds(lambda t, k: t + k * math.ulp(t), THRESHOLDS, st.integers(-4, 4))
VALUES = st.floats(allow_nan=False, allow_infinity=False) | st.floats(0.5, 2.0) | NEAR


def read(text):
    return float(text.replace(",", ""))


def side(value, threshold):
    return (value > threshold) - (value < threshold)


class TestShownEdge:
    @given(VALUES, st.lists(THRESHOLDS, max_size=3))
    @example(0.9996, [1.0])
    @example(1.0497, [1.0, 1.05])
    @example(math.nextafter(1.0, 0.0), [1.0])
    def test_side(self, value, thresholds):
        """What is read is on the same side of every threshold as the number, or on it only if the number is."""
        shown = read(shown_edge(value, thresholds))
        assert [side(shown, one) for one in thresholds] == [side(value, one) for one in thresholds]

    @given(VALUES, VALUES)
    def test_side_of_itself(self, value, threshold):
        """The same where the threshold is any number, also the number itself or its neighbour."""
        assert side(read(shown_edge(value, [threshold])), threshold) == side(value, threshold)

    @given(st.floats(-1e300, 1e300, allow_subnormal=False), st.lists(THRESHOLDS, max_size=3))
    def test_near(self, value, thresholds):
        """What is read is within half a unit of the last of two digits: |error| <= |value| / 20, by 5 ulp of it."""
        shown = read(shown_edge(value, thresholds))
        assert abs(shown - value) <= abs(value) / 20 + 5 * math.ulp(value)

    def test_plain_rounding_crosses(self):
        """Three digits alone would cross a threshold, so that the property above is not empty."""
        assert read(figure(0.9996)) == 1.0
        assert read(figure(1.0497)) == 1.05

    @pytest.mark.parametrize(
        ("value", "shown"),
        [
            (1.834, "1.83"),
            (0.9996, "0.9996"),
            (1.0497, "1.0497"),
            (1.05, "1.05"),
            (1.0, "1.00"),
            (0.0, "0"),
            (0.04361, "0.044"),
            (0.8123, "0.812"),
            (123.4, "123"),
            (1234.5, "1,234"),
            (1.5e-7, "1.5e-07"),
            (None, "\N{EN DASH}"),
        ],
    )
    def test_shown(self, value, shown):
        """Three digits, two below a tenth, more only where a threshold is near."""
        assert shown_edge(value, (1.0, 1.05)) == shown


class TestFigures:
    @pytest.mark.parametrize(
        ("value", "digits", "shown"),
        [
            (29.14, 3, "29.1"),
            (0.01234, 3, "0.0123"),
            (9.996, 3, "10.0"),
            (999.6, 3, "1,000"),
            (32768.4, 3, "32,768"),
            (999_999.7, 3, "1.00e+06"),
            (0.00099999, 2, "0.0010"),
            (0.00099, 2, "9.9e-04"),
            (-0.0, 3, "0"),
            (-2.5, 2, "-2.5"),
            (1e300, 2, "1.0e+300"),
        ],
    )
    def test_figure(self, value, digits, shown):
        """Significant digits, with a power of ten only below a thousandth and from a million on."""
        assert figure(value, digits) == shown

    def test_interval(self):
        """An interval stands in brackets; a bound that does not exist is said to be open."""
        assert interval(1.83, 1.8, 1.86) == "1.83 (1.80 to 1.86)"
        assert interval(1.83, 1.8, None) == "1.83 (at least 1.80)"
        assert interval(1.83, None, 1.86) == "1.83 (at most 1.86)"
        assert interval(1.83, None, None) == "1.83 (no interval)"
        assert interval(None, 1.0, 2.0) == "\N{EN DASH}"

    def test_percent(self):
        """A share is never rounded to all or nothing."""
        assert percent(0.9998) == "99.98%"
        assert percent(1.0) == "100%"
        assert percent(0.3) == "30.0%"
        assert percent(1e-9) == "1.0e-07%"

    def test_at_most(self):
        """A bound is rounded up, so that it stays one."""
        assert at_most(4.605 / 32768) == "at most 1 in 7,115"
        assert at_most(0.971) == "at most 98%"

    @given(st.floats(1e-9, 1.0))
    def test_at_most_is_a_bound(self, share):
        """What is read is not below the bound itself."""
        words = at_most(share).removeprefix("at most ")
        number = float(words[:-1]) / 100 if words.endswith("%") else 1 / read(words.removeprefix("1 in "))
        assert number >= share * (1 - 1e-15)  # the division of 1 by a number of paths rounds once

    def test_counts(self):
        """Large numbers are parted or spoken."""
        assert count(1048576) == "1,048,576"
        assert count(29707068485431821590331392) == "2.97e+25"
        assert million(25_600_000) == "25.6 million"
        assert million(2_345_000_000) == "2.35 thousand million"
        assert million(187_722.4) == "187,722"
        assert million(9e15) == "9.00e+15"

    @pytest.mark.parametrize(
        ("seconds", "words"),
        [
            (0.2, "less than 1 s"),
            (40.4, "about 40 s"),
            (100.0, "about 1.7 min"),
            (3000.0, "about 50 min"),
            (9000.0, "about 2.5 h"),
            (400_000.0, "about 4.6 days"),
        ],
    )
    def test_duration(self, seconds, words):
        """A time is given in the unit in which people speak of it."""
        assert duration(seconds) == words

    @pytest.mark.parametrize(
        ("value", "shown"),
        [(1.0, "1"), (0.002, "0.002"), (1 / 3, "0.3333333333333333"), (None, "none"), (True, "true"), (3, "3")],
    )
    def test_setting(self, value, shown):
        """A value of the audit file is printed in full, as the file would write it."""
        assert setting_value(value) == shown
        assert setting_value(["float16", "\x1b"]) == '["float16", "\\u001b"]'


class TestWords:
    @pytest.mark.parametrize(
        ("levels", "words"),
        [
            ([3], "level 3"),
            ([1, 0], "levels 0 and 1"),
            ([0, 1, 2], "levels 0 to 2"),
            ([0, 1, 2, 5], "levels 0 to 2 and 5"),
            ([0, 1, 4, 6, 7, 8], "levels 0, 1, 4 and 6 to 8"),
        ],
    )
    def test_levels(self, levels, words):
        """Levels side by side are named by the first and the last."""
        assert levels_named(levels) == words

    def test_joined(self):
        """A list reads as a list in a sentence."""
        assert [joined("abc"[:n]) for n in range(4)] == ["", "a", "a and b", "a, b and c"]
        assert joined("ab", "or") == "a or b"

    @given(st.text())
    def test_clean(self, text):
        """Every character is printable, none is lost that was, and cleaning twice changes nothing."""
        shown = clean(text)
        assert shown.isprintable()
        assert clean(shown) == shown
        kept = [character for character in text if character.isprintable()]
        if kept:
            assert [character for character in shown if character != " "] == [c for c in kept if c != " "]

    def test_clean_examples(self):
        """Colours, a turned direction of writing, a half of a pair and line ends do not come through."""
        assert clean("a\x1b[31mb\u202ec\ud800d\ne\tf") == "a[31mbcd e f"
        assert clean("\x00\x07") == "(no printable name)"

    def test_clean_lines(self):
        """Lines stay lines, and blanks at their beginnings stay."""
        assert clean_lines("a\n  b\x1b[2J\n\n") == "a\n  b[2J\n\n"
