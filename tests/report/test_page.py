"""The page as text: what stands where, in words; the browser has its own tests."""

from __future__ import annotations

import hashlib
import html
import os
import re
import subprocess
import sys
from functools import cache
from itertools import pairwise

import made_records as made
import numpy as np
import pages
import pytest
import test_approximate_text as approximate
from msgspec.structs import replace

from narrowgauge.record.audit import CanaryEntry
from narrowgauge.report import page as page_module
from narrowgauge.report.blocks import Cell
from narrowgauge.report.page import ReportError, page, write_page

ASKED = [
    "crossing",
    "law",
    "schemes",
    "draws",
    "branches",
    "lines",
    "range",
    "averaging",
    "domain",
    "rounding",
    "measured",
    "cautions",
]


@cache
def built(record):
    """The page of a record that a function makes, made once."""
    return page(record())


def page_of(record):
    return built(record) if callable(record) else page(record)


def words(record):
    """The text of a page on one line."""
    text = page_of(record)
    body = text[text.index("<body>") :]
    return " ".join(html.unescape(re.sub(r"<[^>]*>", " ", body)).split())


def section(record, key):
    """The text of one section."""
    text = page_of(record)
    found = text[text.index(f'<section id="{key}"') :].split('<section id="')[1]
    return " ".join(html.unescape(re.sub(r"<[^>]*>", " ", found.partition(">")[2])).split())


def replaced_saving(record, **changes):
    name, entry = next(iter(record.quantities.items()))
    return replace(record, quantities={name: replace(entry, allocation=replace(entry.allocation, **changes))})


class TestWhole:
    @pytest.mark.parametrize("record", [pages.full_record, made.audit_record, made.troubled_record])
    def test_two_pages_of_one_audit_are_the_same(self, record):
        """Byte for byte, drawings too."""
        assert built(record) == page(record())

    def test_another_process_draws_the_same(self):
        """No seed of a process, and no setting of matplotlib that a user has, reaches the page."""
        code = (
            "import sys, hashlib; sys.path.insert(0, sys.argv[1]); import matplotlib, pages\n"
            "matplotlib.rcParams.update({'font.size': 30, 'svg.fonttype': 'path', 'lines.linewidth': 9})\n"
            "from narrowgauge.report.page import page\n"
            "print(hashlib.sha256(page(pages.full_record()).encode()).hexdigest())"
        )
        here = str(pages.__file__).rpartition("/")[0]
        run = [sys.executable, "-c", code, here]
        found = set()
        for seed in ("1", "2"):
            environment = {**os.environ, "PYTHONHASHSEED": seed}
            found.add(subprocess.run(run, env=environment, check=True, capture_output=True, text=True).stdout)
        assert found == {hashlib.sha256(built(pages.full_record).encode()).hexdigest() + "\n"}

    def test_questions_in_order(self):
        """The sections stand in the order in which a person asks, each with a link to it."""
        text = built(made.audit_record)
        assert re.findall(r'<section id="(\w+)"', text) == [*ASKED, "words"]
        assert re.findall(r'<li><a href="#(\w+)"', text) == ["verdict", *ASKED, "words"]

    def test_headings_are_nested(self):
        """What belongs to a quantity stands one heading below it, and none is skipped."""
        found = re.findall(r"<h([1-6])[^>]*>([^<]*)<", built(made.audit_record))
        assert ("3", "Quantity option") in found
        assert ("4", "float16 for option") in found
        depths = [int(depth) for depth, _ in found]
        assert all(after <= before + 1 for before, after in pairwise(depths))

    @pytest.mark.parametrize(
        ("text", "second"),
        [
            ("0.500 (0.490 to 0.510)", "(0.490 to 0.510)"),
            ("-1.3e-04 (at least -2)", "(at least -2)"),
            ("1.05 (no interval)", ""),
            ("the kernel raised (line 7)", ""),
        ],
    )
    def test_an_interval_is_one_piece(self, text, second):
        """It is not broken at the end of a line; other words are."""
        assert Cell(text).pieces[1] == second
        assert "".join(Cell(text).pieces) == text
        cell = 'data-label="slope"><span>1.00 <span class="unbroken">(0.970 to 1.03)</span></span></td>'
        assert cell in built(pages.full_record)

    def test_nothing_is_fetched_or_run(self):
        """No script, no address, no style outside the one that the policy names by its hash."""
        text = built(pages.large_record)
        assert not re.search(r"<script|https?:|//[a-z]|\sstyle=|\son\w+=|@import|url\((?!#)", text)
        assert text.count("<style>") == 1
        assert re.search(r"default-src &#39;none&#39;; style-src &#39;sha256-[\w+/=]+&#39;", text)

    def test_pyplot_stays_out(self):
        """Its state is the process's, and it would look for a screen."""
        code = (
            "import sys; sys.path.insert(0, sys.argv[1]); import pages; from narrowgauge.report.page import page\n"
            "page(pages.sound_record()); sys.exit('matplotlib.pyplot' in sys.modules)"
        )
        here = str(pages.__file__).rpartition("/")[0]
        assert subprocess.run([sys.executable, "-c", code, here], check=False).returncode == 0

    def test_a_kernel_that_has_numpy_raise_does_not_stop_it(self):
        """The audit and its page are made in one process."""
        with np.errstate(all="raise"):
            assert page(pages.sound_record()) == built(pages.sound_record)

    def test_settings_of_matplotlib_are_put_back(self):
        """Whoever draws in the same process keeps what he set."""
        import matplotlib

        with matplotlib.rc_context({"svg.fonttype": "path", "font.size": 31.0}):
            page(pages.sound_record())
            assert (matplotlib.rcParams["svg.fonttype"], matplotlib.rcParams["font.size"]) == ("path", 31.0)


class TestFirstScreen:
    def test_what_a_manager_reads(self):
        """The cost at equal accuracy, with its interval, as a share of today's."""
        shown = words(pages.sound_record)
        sentence = (
            "Yes: at the same accuracy, the cheapest mix of formats costs 31.8% (99% interval 31.2% to 32.3%) of "
        )
        assert f"{sentence}what float64 alone costs today." in shown

    def test_the_quantity_that_saves_least_is_named(self):
        """With several of them."""
        assert "today, for option, which saves least." in words(made.audit_record)

    def test_no_share_is_rounded_to_all(self):
        """A saving of one in two thousand is not shown as none."""
        shown = words(replaced_saving(pages.sound_record(), saving=1.0004, saving_low=1.0001, saving_high=1.0007))
        assert "costs 99.96% (99% interval 99.9% to 99.99%) of what" in shown

    def test_formats_and_levels(self):
        """The finest paying level of each, the verdict of every level in words, and why it ends."""
        shown = words(pages.sound_record)
        assert "float16 2 (up to level 3 not refuted)" in shown
        assert "pays on levels 0 to 2; undecided on level 3; does not pay on level 4" in shown
        assert "On level 3 the paths ran out before the edge was settled." in shown

    def test_wrong_ladder_comes_first(self):
        """An alarm stands above the verdict, and there is none then."""
        shown = words(made.troubled_record)
        assert shown.index("THE KERNEL OR THE COUPLING OF ITS DRAWS IS WRONG.") < shown.index("No verdict: the levels")
        assert "Put the kernel or the coupling of its draws right" in shown

    def test_next_steps(self):
        """What would settle the open levels, what is assumed, and at last whose approval is needed."""
        shown = words(pages.sound_record)
        assert "To settle float16 on level 3 and bfloat16 on level 1, raise [sampling] most_paths" in shown
        assert "to about 1,300,000 (now 65,536); for some of it, how many are enough cannot be told." in shown
        assert "model validation and change control: this audit is evidence, not approval." in shown

    def test_a_saving_is_drawn_where_the_answer_is_yes(self):
        """A bar of costs would say more than the sentence above it where nothing is decided, refused or wrong."""
        assert '<ul class="gauges">' in built(pages.sound_record)
        for record in (pages.undecided_record, pages.refused_record, made.troubled_record):
            assert "gauges" not in built(record).partition("</style>")[2]

    def test_nothing_pays(self):
        """Then the answer is no, and what to keep."""
        assert "No: lower precision does not pay here. Keep float64." in words(pages.refused_record)

    def test_nothing_is_finite(self):
        """Then float64 is nothing to keep: there is no verdict, and the levels where that is so are named."""
        shown = words(pages.nonfinite_record)
        assert "No verdict: on levels 0 to 4 float64 itself has no results of finite variance to compare with." in shown
        assert (
            "Find out why the kernel has no results of finite variance in float64 on levels 0 to 4. Then audit again."
            in shown
        )
        assert "Keep float64" not in shown

    def test_nothing_is_settled(self):
        """Then it is not yet known."""
        shown = words(pages.undecided_record)
        assert (
            "Not decided yet: whether lower precision pays in float16, bfloat16 or float32 needs more paths." in shown
        )


class TestSections:
    @pytest.mark.parametrize("part", ["branches", "lines", "averaging", "domain", "range"])
    def test_what_was_not_measured_is_said(self, part):
        """In words, with what that leaves open."""
        record = replace(pages.sound_record(), range=None, averaging=None)
        assert "Not measured in this audit: " in section(record, part)

    @pytest.mark.parametrize("name", pages.EMPTY)
    def test_nothing_to_show_is_said_in_words(self, name):
        """Every section has text, and no drawing is empty."""
        text = built(pages.EMPTY[name])
        for drawing in re.findall(r"<figure>.*?</figure>", text, re.S):
            assert drawing.count("<use ") >= 2
        for key in ASKED:
            assert len(section(pages.EMPTY[name], key)) > 60

    def test_one_level_has_no_crossing(self):
        """Nor a drawing of one."""
        shown = section(pages.one_level_record, "crossing")
        assert "There is nothing to draw along a ladder: fewer than two levels have a signal." in shown

    def test_constants_stand_with_the_range(self):
        """They are measured, where headroom is not."""
        assert "reserve.py:7: 1e-08 becomes 0 in float16" in section(made.audit_record, "range")

    def test_canary_of_a_kernel_that_rounds_for_itself(self):
        """It has the place of the emulation's reach, and what it cannot show."""
        one = CanaryEntry(
            arm="float16",
            quantity="value",
            level=0,
            paths=1024,
            finding="rounds",
            like=None,
            outside=0,
            rounded_once=0.1,
            rounded_once_small=None,
            error=0.5,
        )
        shown = section(replace(pages.sound_record(), canary=[one], reach=None, range=None), "rounding")
        assert "float16, value: rounded on the way: 90.0% of the results are not those of a wider format" in shown
        assert "From outside it shows whether the state is rounded" in shown
        assert "Not looked for: the kernel rounds for itself." in section(
            replace(pages.sound_record(), canary=[one], reach=None, range=None), "range"
        )

    def test_approximate_draws(self):
        """What they are, what they cost, and a drawing; without them a sentence."""
        shown = section(approximate.record, "draws")
        assert "piecewise constant on 1,024 cells" in shown
        assert "What puts more into the correction: the approximate draws on levels 0 and 1" in shown
        assert "No approximate draws were tried" in section(pages.sound_record, "draws")

    def test_every_setting_is_there(self):
        """Each key of the audit file with its whole value, and whether it was a default."""
        record = pages.sound_record()
        asked = {**record.asked, "parameters": {"volatility": 0.1234567890123456, "curve": [1, 2.5]}}
        shown = section(replace(record, asked=asked), "measured")
        assert "parameters.volatility 0.1234567890123456 audit file" in shown
        assert "parameters.curve [1, 2.5] audit file" in shown
        assert "sampling.confidence 0.99 default" in shown
        assert "sampling.seed 1 audit file" in shown
        assert "sha256:invented" in shown

    def test_a_ratio_below_one_is_not_shown_as_one(self):
        """At a cost ratio of 1 no narrow step is cheaper; 0.9989 is below it."""
        record = pages.sound_record()
        near = {"float16:float64": replace(made.CORRECTION, breakeven_cost_ratio=0.9989)}
        entry = made.with_level(record.quantities["value"], 0, corrections=near)
        assert "float16 with float64 2.50 (2.40 to 2.60) 0.999 " in section(made.audit_record(value=entry), "schemes")

    def test_rounded_edges_stay_on_their_side(self):
        """1.0497 (0.9996 to 1.0501) against 1 and 1.05, as on the terminal."""
        assert "1.0497 (0.9996 to 1.0501)" in section(pages.sound_record, "schemes")


class TestTables:
    def test_heads_and_captions(self):
        """Every table says what it is; every column and every row has a head."""
        text = built(pages.full_record)
        tables = re.findall(r"<table.*?</table>", text, re.S)
        assert len(tables) > 15
        for table in tables:
            assert "<caption" in table
            rows = re.findall(r"<tr.*?</tr>", table, re.S)
            assert rows[0].count('scope="col"') == rows[0].count("<th")
            assert all(row.count('scope="row"') == 1 for row in rows[1:])
            assert len({len(re.findall(r"<t[hd]", row)) for row in rows}) == 1

    def test_drawings_have_words(self):
        """Each has a title, a caption, and what it shows as text."""
        text = built(pages.sound_record)
        drawings = re.findall(r"<figure>.*?</figure>", text, re.S)
        assert len(drawings) == 4
        for drawing in drawings:
            told = html.unescape(re.search(r'role="img" aria-label="([^"]*)"', drawing)[1])
            assert len(told) > 100
            assert "table below" in told
            assert "<figcaption>" in drawing


class TestHostile:
    def test_markup_is_text(self):
        """Nothing that a name holds becomes an element, an attribute or a template."""
        text = built(pages.hostile_record)
        assert "<script" not in text
        assert "<img" not in text
        assert "value[red]" in text
        assert "{{ 7 * 7 }}" in text
        assert "49" not in re.findall(r"\{\{.*?\}\}", text)

    def test_no_control_character_is_left(self):
        """Each shows as its escape, or is dropped as on the terminal."""
        text = built(pages.hostile_record)
        assert not [c for c in text if not c.isprintable() and c != "\n"]
        assert "\\x1b[31m" in text
        assert "\\u202e" in text


class TestWriting:
    @pytest.mark.parametrize(
        ("missing", "words"),
        [
            (["jinja2"], "jinja2, which is not installed"),
            (["matplotlib", "jinja2"], "matplotlib and jinja2, which are not installed"),
        ],
    )
    def test_without_the_packages(self, tmp_path, monkeypatch, missing, words):
        """One message says what to install."""
        for name in missing:
            monkeypatch.setitem(sys.modules, name, None)
        with pytest.raises(ReportError) as caught:
            write_page(pages.sound_record(), tmp_path / "report.html", "report.html")
        assert str(caught.value) == f"report: the page needs {words}; accepted: pip install '.[report]' first"
        assert list(tmp_path.iterdir()) == []

    def test_where_it_cannot_be_written(self, tmp_path):
        """The message has the file."""
        with pytest.raises(ReportError, match=r"^there: cannot be written: No such file or directory$"):
            write_page(pages.sound_record(), tmp_path / "no" / "report.html", "there")

    @pytest.mark.parametrize("name", ["audit.json", "levels.csv", "lines.csv", "blocks.sqlite", "policy.json"])
    def test_no_file_of_an_audit_is_overwritten(self, tmp_path, name):
        """Whatever --out says."""
        with pytest.raises(ReportError, match=f"^{re.escape(name)}: is a file of an audit; accepted: another name"):
            write_page(pages.sound_record(), tmp_path / name, name)

    def test_a_large_page_is_small_enough(self):
        """Twelve levels, four formats, sixty lines of source, thirty-two scenarios: 1.5 MB at most."""
        assert len(built(pages.large_record).encode()) < 1_500_000

    def test_templates_are_in_the_package(self):
        """Where the installed package looks for them."""
        assert sorted(one.name for one in page_module._TEMPLATES.iterdir()) == ["page.css", "page.html"]
