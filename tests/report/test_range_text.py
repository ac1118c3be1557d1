"""Ranges, lost additions and sums in words."""

from __future__ import annotations

from made_watched import AVERAGING, WATCHED, averaged, sums
from msgspec.structs import replace
from rendering import HOSTILE

from narrowgauge.report.averaging import averaged_over, averaging_lines
from narrowgauge.report.range import range_lines, watched_on


def test_each_format_with_something_to_say_has_its_lines():
    """Totals with intervals, what is not finite first, the worst lines, a shift; what is quiet is one line."""
    assert range_lines(WATCHED) == [
        "float16: results from 2^-17 to 2^16, 3 bits short below and 1 bit short above; 3.12% (2.91% to 3.34%) of all "
        "additions are lost on level 4; 1.95% (1.21% to 2.84%) of all results are below the normal numbers on level "
        "4; 1 result is too large on level 4.",
        "float16, level 4: the first result that is infinite is at reserve.py:9, step 4, path 17: multiply of 300 and "
        "400.",
        "float16: reserve.py:7, add: 3.12% lost on level 4, first on step 11.",
        "float16: reserve.py:9, multiply: 3.91% below the normal numbers on level 4, 40 of them 0.",
        "float16: with all exponents 2 higher, 0 results would be too large (now 1) and 1,144 below the normal numbers "
        "(now 640); the error variance on level 4 would be 0.75 times what it is.",
        "bfloat16: results from 2^-17 to 2^16, 109 bits to spare below and 111 bits to spare above; 25.0% (24.4% to "
        "25.6%) of all additions are lost on level 4.",
        "bfloat16, level 4: the kernel raised ValueError: not today.",
        "bfloat16: reserve.py:7, add: 25.0% lost on level 4, first on step 3.",
        "float32: every result is a normal number, with 109 bits to spare at the nearer end, and no addition is lost.",
    ]


def test_where_nothing_is_to_be_said_one_line_does():
    """All formats are quiet on level 0."""
    quiet = replace(WATCHED, levels=WATCHED.levels[:1], shifts={})
    assert range_lines(quiet) == [
        "float16, bfloat16 and float32: every result is a normal number, with 8 bits to spare at the nearer end, and "
        "no addition is lost."
    ]


def test_a_run_that_was_stopped_is_said_to_be():
    """Nothing is known then, and nothing is claimed."""
    assert watched_on(None) == "not known, since the run that looks at every number was stopped."
    assert range_lines(None) == []
    assert watched_on(WATCHED) == "every number of 256 paths on levels 0 and 4 was looked at."


def test_names_of_the_user_do_no_harm():
    """A file's name cannot move the cursor."""
    level = WATCHED.levels[1]
    lines = [replace(line, file=HOSTILE) for line in level.lines]
    text = " ".join(range_lines(replace(WATCHED, levels=[replace(level, lines=lines)])))
    assert "\x1b" not in text
    assert "\n" not in text


def test_sums_of_a_plan_are_worst_where_they_err_most():
    """The larger share of the two levels; a format whose sums are within bounds shares a line."""
    assert averaging_lines(AVERAGING) == [
        "float16: one after the other, sums of the paths of level 0 err by 31 standard errors (45,210 are planned, "
        "at most 190 stay within bounds); in pairs, as NumPy adds, sums of the paths of level 0 pass its range (45,210 "
        "are planned, at most 6,200 stay within bounds).",
        "float32: one after the other, sums of the paths of level 0 err by 0.21 standard errors (45,210 are planned, "
        "at most 20,000 stay within bounds).",
        "float64: the plan's sums err by less than 10% of their standard error.",
    ]
    assert "10% of a standard error" in averaged_over(AVERAGING)


def test_without_a_plan_the_fewest_paths_that_may_be_summed_are_said():
    """By order, with the level; a format that may sum any number says that."""
    formats = {
        "float32": (sums(None, 20_436, "no plan"), sums(None, None, "no plan")),
        "float64": (sums(None, None, "no plan"), sums(None, None, "no plan")),
    }
    more = {**formats, "float32": (sums(None, 30_000, "no plan"), sums(None, None, "no plan"))}
    found = replace(AVERAGING, quantities={"value": [averaged(0, None, more), averaged(1, None, formats)]})
    assert averaging_lines(found) == [
        "float32: one after the other, at most 20,000 paths may be summed on level 1.",
        "float64: sums of any number of paths err by less than 10% of their standard error.",
    ]


def test_without_values_that_vary_nothing_is_claimed():
    """A kernel that returns a constant."""
    empty = replace(averaged(0, None, {}), reason="no variance")
    assert averaging_lines(replace(AVERAGING, quantities={"value": [empty]})) == [
        "Nothing is known of sums, since no branch has values that vary."
    ]


def test_an_error_just_above_the_bound_is_not_shown_as_the_bound():
    """0.1004 standard errors are more than a tenth."""
    formats = {"float32": (sums(0.1004, 45_000), sums(0.002, None))}
    (line,) = averaging_lines(replace(AVERAGING, quantities={"value": [averaged(0, 45_210, formats)]}))
    assert "err by 0.1004 standard errors" in line
