"""The text of an audit on a terminal: at any width, with and without colour, whatever the user's names are."""

from __future__ import annotations

import io
import re
import subprocess
import sys
from collections import Counter
from pathlib import Path
from types import SimpleNamespace

import made_records as made
import pytest
from msgspec.structs import replace
from rendering import COLOUR, HOSTILE, flat, numbers, rendered
from rich.cells import cell_len
from rich.console import Console

from narrowgauge.record.audit import ReachLine
from narrowgauge.report.text import Progress, audit_text, planned_text, trial_text

DOCUMENTS = {
    "audit": lambda: audit_text(made.audit_record(), Path("audits/reserve")),
    "troubled": lambda: audit_text(made.troubled_record(), None),
    "trial": lambda: trial_text(made.trial_entry(escapes=True)),
}


class TestTerminal:
    @pytest.mark.parametrize("width", [30, 40, 60, 80, 120])
    @pytest.mark.parametrize("name", DOCUMENTS)
    def test_width(self, name, width):
        """No line is longer than the terminal is wide."""
        assert max(cell_len(line) for line in rendered(DOCUMENTS[name](), width).split("\n")) <= width

    @pytest.mark.parametrize("width", [30, 40, 60])
    @pytest.mark.parametrize("name", DOCUMENTS)
    def test_no_number_is_broken(self, name, width):
        """The numbers of a narrow terminal are those of a wide one: none is folded into two."""
        narrow, wide = (numbers(rendered(DOCUMENTS[name](), columns)) for columns in (width, 400))
        assert len(wide) > 3
        assert set(narrow) == set(wide)

    def test_a_broken_number_would_be_noticed(self):
        """Negative control: a number folded at the end of a line is another one."""
        assert numbers("noise 2.6e-04") == Counter(["2.6e-04"])
        assert set(numbers("noise 2.6e\n-04")) != {"2.6e-04"}
        assert set(numbers("32,7\n68")) != {"32,768"}

    def test_too_narrow_for_a_table(self):
        """Where a table does not fit without broken numbers each row is a paragraph, each cell behind its heading."""
        text = rendered(audit_text(made.audit_record(), None), 40)
        assert (
            "level 0: steps 2; paths 32,768; signal\n"
            "  28.3; noise float16 9.8e-04; noise\n"
            "  bfloat16 0.0078; noise float32 1.2e-07\n"
        ) in text

    @pytest.mark.parametrize("name", DOCUMENTS)
    def test_words_do_not_need_colour(self, name):
        """On a terminal the same words appear as in a file, only coloured."""
        coloured = rendered(DOCUMENTS[name](), force_terminal=True)
        assert COLOUR.search(coloured)
        plain = [line.rstrip() for line in COLOUR.sub("", coloured).split("\n")]
        assert plain == rendered(DOCUMENTS[name]()).split("\n")

    @pytest.mark.parametrize("name", DOCUMENTS)
    def test_no_colour(self, name):
        """NO_COLOR takes every colour away; a file gets no escape sequence at all."""
        text = rendered(DOCUMENTS[name](), force_terminal=True, environment={"NO_COLOR": "1"})
        codes = {int(code) for found in COLOUR.findall(text) for code in re.findall(r"\d+", found)}
        assert codes <= {0, 1, 3, 4, 22}  # bold and the like
        assert "\x1b" not in rendered(DOCUMENTS[name]())

    def test_hostile_names(self):
        """Names of quantities, kernels, formats and files neither colour, move nor hide anything."""
        entry = made.with_arm(made.quantity_entry(), 0, "float16", reason=HOSTILE, verdict="does not pay")
        record = made.audit_record(**{HOSTILE: entry, "[/]": made.quantity_entry(), "\x1b[2J": made.quantity_entry()})
        record = replace(record, kernel=replace(record.kernel, run=HOSTILE), cautions=[HOSTILE])
        shown = "va[31mlue[red]<script> next"
        text = rendered(audit_text(record, Path(HOSTILE)), force_terminal=True, color_system="truecolor")
        assert all(character.isprintable() for character in COLOUR.sub("", text).replace("\n", ""))
        words = flat(audit_text(record, Path(HOSTILE)), 200)
        for place in (
            "Audit of {}",
            "Quantity {}",
            "- {}",
            "What float16 is worth for {}",
            "does not pay: {}",
            "Written to {}:",
        ):
            assert place.format(shown) in words
        assert "Quantity [/]" in words
        assert "Quantity [2J" in words

    def test_hostile_trial(self):
        """Nor do those in a trial run."""
        line = ReachLine(file=HOSTILE, line=3, operation=HOSTILE, route=HOSTILE, count=1)
        trial = made.trial_entry(escapes=False)
        trial = replace(trial, reach=replace(trial.reach, lines=[line, *trial.reach.lines], remarks=[HOSTILE]))
        text = rendered(trial_text(trial))
        assert all(character.isprintable() for character in text.replace("\n", ""))

    def test_long_names(self):
        """A name longer than the terminal is wide is folded, not cut."""
        name = "x" * 150
        text = rendered(audit_text(made.audit_record(**{name: made.quantity_entry()}), None), 60)
        assert f"Thecheapestschemeofeachlevelof{name}" in text.replace("\n", "").replace(" ", "")


PLAN = SimpleNamespace(
    levels=tuple(
        SimpleNamespace(level=level, steps=2 * 2**level, paths_first_look=32768, paths_most=1048576)
        for level in range(7)
    ),
    path_steps=25_600_000,
    most_path_steps=819_200_000,
    seconds=40.4,
    most_seconds=1292.8,
    kept=0,
    domain=None,
)


class TestProgress:
    def test_plan(self):
        """The plan has levels, paths, steps and time, at the first look and at most."""
        assert flat(planned_text(PLAN)) == (
            "Plan: 7 levels of 2 to 128 steps. The first look takes 32,768 paths a level: 25.6 million steps of paths "
            "in all arms together, about 40 s. Levels that stay undecided go on to at most 1,048,576 paths; if all "
            "did, that would be 819 million steps, about 22 min."
        )

    def test_plan_of_one_look(self):
        """Where the first look is the last, nothing is said about more."""
        plan = SimpleNamespace(**{**vars(PLAN), "levels": PLAN.levels[:1], "most_path_steps": PLAN.path_steps})
        assert flat(planned_text(plan)) == (
            "Plan: 1 level of 2 steps. The first look takes 32,768 paths a level: 25.6 million steps of paths in "
            "all arms together, about 40 s."
        )

    def test_plan_of_an_audit_that_goes_on(self):
        """What is there from before is told."""
        for kept, words in ((1, "1 block is"), (1200, "1,200 blocks are")):
            text = flat(planned_text(SimpleNamespace(**{**vars(PLAN), "kept": kept})))
            assert text.endswith(f"about 22 min. {words} there from before and will not be run again.")

    def watched(self, *, quiet, terminal):
        stream = io.StringIO()
        console = Console(file=stream, width=80, force_terminal=terminal, _environ={"TERM": "xterm"})
        with Progress(quiet=quiet, console=console) as watcher:
            watcher.planned(PLAN)
            watcher.look(1, 2, (0, 1, 2), 100)
            watcher.advanced(50)
            watcher.look(2, 2, (1,), 100)
            watcher.advanced(200)
        return stream.getvalue()

    def test_terminal(self):
        """On a terminal the plan is followed by a bar for each look."""
        text = self.watched(quiet=False, terminal=True)
        assert "Plan:" in COLOUR.sub("", text)
        assert "look 1 of 2, levels 0 to 2" in text
        assert "look 2 of 2, level 1" in text
        assert "100%" in text

    def test_file(self):
        """In a file there is the plan alone."""
        text = self.watched(quiet=False, terminal=False)
        assert " ".join(text.split()) == flat(planned_text(PLAN))

    def test_quiet(self):
        """With quiet there is no plan."""
        assert "Plan" not in self.watched(quiet=True, terminal=True)
        assert self.watched(quiet=True, terminal=False) == ""


def test_no_numpy():
    """The text needs no numerical library, so that a message appears at once."""
    code = "import sys, narrowgauge.report.text; sys.exit('numpy' in sys.modules)"
    subprocess.run([sys.executable, "-c", code], check=True)
