"""The sections on what formats do inside the kernel, and on other parameters, as text."""

from __future__ import annotations

import html
import re

import made_inside as inside
import pages
import pytest
from msgspec.structs import replace
from test_page import built, section, words

from narrowgauge.report.wording import NONE


class TestBranches:
    def test_what_differs_is_said_as_on_the_terminal(self):
        """What was compared, where it parts, why, and what it does to the estimate."""
        shown = section(pages.full_record, "branches")
        assert (
            "Branches of a split: reserve.py:cheap against the low part of reserve.py:fine; they do not agree." in shown
        )
        assert "float16, level 2: 12 of 1,024 paths differ, by 1.00 ulps at most" in shown
        assert "one rounding less explains that, a fused multiply-add." in shown

    def test_it_is_the_first_thing_to_do(self):
        """With the format and the level."""
        steps = words(pages.full_record).partition("What to do next")[2]
        assert steps.startswith(
            " Make both branches of a split give the same bits, or use no split. As it is: float16: no"
        )


class TestLines:
    def test_bars_and_figures_stand_right_of_the_lines_that_matter(self):
        """Nothing stands at the left of a line; a line that does not matter has nothing at its right either."""
        text = built(pages.full_record)
        rows = re.findall(r"<tr.*?</tr>", text[text.index('class="source"') :].partition("</table>")[0], re.S)
        heads = re.findall(r"<th[^>]*>(.*?)</th>", rows[0])
        assert heads == ["source", "share of error variance"]
        assert "12.9%" in rows[1]
        assert '<rect class="f-s1" x="0" y="0" width="12.9"' in rows[1]
        assert re.search(r"<th[^>]*><code class=\"d4\">x = x \+ dx</code></th>", rows[2])
        assert re.search(r"<td[^>]*></td>", rows[2])

    def test_lines_that_are_left_out_are_seen(self):
        """A gap says where the source goes on."""
        assert "x = x + dx from line 46 return x" in section(pages.full_record, "lines")

    def test_what_widening_buys(self):
        """Each set with how far it pays, its gain and what is charged; then other arithmetics."""
        shown = section(pages.full_record, "lines")
        assert "nothing: float16 as it is 2 1.08 (1.05 to 1.11) 0.250 0%" in shown
        sets = "reserve.py:1 (the state) and reserve.py:3 (the state) 4, perhaps 5 1.08 (1.05 to 1.11) 0.250 12.5%"
        assert sets in shown
        assert f"stochastic rounding on no level {NONE} 0.250" in shown
        assert "To use float16 on more levels, keep its costliest lines wider: with reserve.py:1" in words(
            pages.full_record
        )

    def test_how_to_find_them_is_said(self):
        """Where nobody asked, in the section and among the next steps."""
        hint = "The option --lines finds out which lines cost float16 and bfloat16 their accuracy."
        assert hint in section(pages.sound_record, "lines")
        assert hint in words(pages.sound_record).partition("What to do next")[2].partition("Questions")[0]

    def test_a_study_that_was_stopped(self):
        """Has its reason in place of figures."""
        entry = replace(inside.line_studies(["float16"], ["value"], 6), formats={}, reason="the time ran out")
        shown = section(replace(pages.sound_record(), lines=entry), "lines")
        assert shown.endswith("Which lines cost the accuracy was not found out: the time ran out.")

    def test_no_line_matters(self):
        """Then that is said in place of a listing."""
        entry = inside.line_studies(["float16"], ["value"], 1000)
        shown = section(replace(pages.sound_record(), lines=entry), "lines")
        assert "No line or input brings as much as a hundredth of the error variance." in shown
        assert "from line 1" not in shown


class TestRange:
    def test_magnitudes_are_powers_of_two_and_headroom_bits(self):
        """For each line over all levels and operations; the formats' own ends in the drawing."""
        shown = section(pages.full_record, "range")
        assert "reserve.py:1 2^-13 2^7 2, 9 2, 9 2, 9" in shown
        assert "reserve.py:4 2^-16 2^10 -3, -1 -3, -1 -3, -1" in shown
        told = html.unescape(re.search(r'aria-label="(What formats hold[^"]*)"', built(pages.full_record))[1])
        assert "float16: from 2 to the -14 to 2 to the 15; " in told
        assert "reserve.py:4: from 2 to the -16 to 2 to the 10" in told

    def test_of_many_lines_the_nearest_to_an_end_are_drawn(self):
        """The table has all of them."""
        told = html.unescape(re.search(r'aria-label="(What formats hold[^"]*)"', built(pages.large_record))[1])
        assert told.count("reserve.py:") == 16
        assert "reserve.py:58: " in told
        assert "reserve.py:57: " not in told
        assert "reserve.py:57 2^-13" in section(pages.large_record, "range")

    def test_a_run_that_was_stopped(self):
        """Leaves words."""
        record = pages.sound_record()
        shown = section(replace(record, range=replace(record.range, watched=None)), "range")
        assert "Not known, since the run that looks at every number was stopped." in shown

    def test_without_any_magnitude(self):
        """All results are zero: nothing is drawn, and the counts stay."""
        watched = inside.ranges(["float16"], 3)
        levels = [
            replace(level, lines=[replace(line, smallest=None, largest=None) for line in level.lines])
            for level in watched.levels
        ]
        record = pages.sound_record()
        record = replace(record, range=replace(record.range, watched=replace(watched, levels=levels)))
        assert "there is no magnitude to draw" in section(record, "range")
        assert f"reserve.py:1 {NONE} {NONE} 2, 9" in section(record, "range")


class TestAveraging:
    def test_numbers_of_paths_against_the_plan(self):
        """Rounded down, with what is too few named and marked."""
        shown = section(pages.full_record, "averaging")
        assert "The most paths of value that may be summed one after the other" in shown
        assert "0 paths 45,210 190, too few 190, too few" in shown
        assert "0 corrections 150 190 190" in shown
        assert '<span class="mark no">190, too few</span>' in built(pages.full_record)

    def test_without_values_that_vary(self):
        """Words, and no table."""
        record = pages.sound_record()
        shown = section(replace(record, averaging=replace(record.averaging, quantities={"value": []})), "averaging")
        assert "Nothing is known of sums, since no branch has values that vary." in shown
        assert "may be summed" not in shown


class TestDomain:
    def test_the_box_and_what_is_claimed(self):
        """A claimed end is rounded inwards, one of the box is as the audit file has it."""
        shown = section(pages.full_record, "domain")
        assert "reserve.py 1 0.1 200 0.1 100.0 log" in shown
        assert "spot fine 1 0.1 200 0.1 200 log" in shown

    def test_every_scenario_that_fails_is_there(self):
        """Refused ones first, with where and why; the one that decides is named; the rest pass."""
        shown = section(pages.full_record, "domain")
        lost = shown.partition("Scenarios that do not pass")[2].partition("Scenarios that pass")[0]
        assert "scenario 17 reserve.py = 0.2700, spot fine = 67.00 refused 0, 1, 2, 3, 4 edge too small" in lost
        assert lost.index("corner 36") < lost.index("scenario 3 ")
        assert "the kernel cannot do it: the kernel raised fine" in lost
        assert "The scenario that decides a level: corner 35 (reserve.py = 0.4500, spot fine = 85.00)" in shown
        assert shown.partition("Scenarios that pass")[2].count("scenario ") == 30 + 1  # and the heading

    def test_a_refused_corner_is_a_thing_to_do(self):
        """Named, with how many more there are."""
        assert "corner 35 (reserve.py = 0.4500, spot fine = 85.00) and 1 more are refused." in words(pages.full_record)

    def test_what_would_settle_a_scenario(self):
        """With how many there are, and the most paths that any of their open levels needs, where it is known."""
        text = "To settle 1 scenario of [domain] left undecided, raise [domain] most_paths"
        record = pages.full_record()
        assert f"{text}; for some of it, how many are enough cannot be told." in words(lambda: record)
        scenarios = [replace(one, levels=[replace(level, paths_needed=41_234) for level in one.levels])
                     for one in record.domain.scenarios]  # fmt: skip
        known = replace(record, domain=replace(record.domain, scenarios=scenarios))
        assert f"{text} to about 42,000." in words(lambda: known)

    def test_nothing_claimed(self):
        """Leaves the columns of the claim empty."""
        found = replace(inside.domain(5, 32), claimed=None)
        shown = section(replace(pages.sound_record(), domain=found), "domain")
        assert "Nothing is claimed: a scenario at the audited point itself does not pass." in shown
        assert f"reserve.py 1 0.1 200 {NONE} {NONE} log" in shown


class TestSafety:
    @pytest.mark.parametrize("key", ["branches", "lines", "range", "averaging", "domain"])
    def test_markup_is_text_in_each_section(self, key):
        """Names of files, parameters and quantities, and source, with no element of their own."""
        text = built(pages.hostile_record)
        part = text[text.index(f'<section id="{key}"') :].split('<section id="')[1]
        assert "<script" not in part
        assert "<b>" not in part
        assert pages.SCRIPT in section(pages.hostile_record, key)

    def test_source_keeps_what_cannot_be_printed(self):
        """As escapes, so that a reader sees that it is there; tabs are blanks."""
        shown = section(pages.hostile_record, "lines")
        assert "a\\x1b[31mb\\u202ec\\x00d" in shown
        assert "\\tx = x" not in shown
