"""The text of an audit: what stands where, in words, at any width, whatever the user's names are.

Whole outputs are held against the files in golden/. On a difference the actual output is saved beside them, as
NAME.actual.txt; look at it, and accept it with NARROWGAUGE_ACCEPT=1 in the environment of pytest.
"""

from __future__ import annotations

import io
import os
import re
import subprocess
import sys
from pathlib import Path
from types import SimpleNamespace
from typing import get_args

import made_records as made
import pytest
from msgspec.structs import replace
from rich.cells import cell_len
from rich.console import Console

from narrowgauge.judge.schemes import Reason
from narrowgauge.kernel.audittables import TargetTable
from narrowgauge.record.audit import FinestEntry, ReachLine
from narrowgauge.report import settings, tables
from narrowgauge.report.text import Progress, audit_text, planned_text, trial_text, verdict_text
from narrowgauge.report.verdict import finest_words

GOLDEN = Path(__file__).parent / "golden"
COLOUR = re.compile(r"\x1b\[[0-9;]*m")
HOSTILE = "va\x1b[31mlue[red]<script>\u202e\nnext"


def rendered(document, width=80, **terminal):
    """The document as a console of this width prints it, without blanks at the ends of lines."""
    stream = io.StringIO()
    environment = {"TERM": "xterm-256color", **terminal.pop("environment", {})}
    console = Console(
        file=stream, width=width, markup=False, highlight=False, emoji=False, _environ=environment, **terminal
    )
    console.print(document)
    return "".join(f"{line.rstrip()}\n" for line in stream.getvalue().split("\n")).rstrip() + "\n"


def flat(document, width=80):
    """The document's words on one line."""
    return " ".join(rendered(document, width).split())


def check_golden(name, text):
    expected, actual = GOLDEN / f"{name}.txt", GOLDEN / f"{name}.actual.txt"
    if os.environ.get("NARROWGAUGE_ACCEPT") == "1":
        expected.write_text(text, encoding="utf-8")
    known = expected.read_text(encoding="utf-8") if expected.exists() else None
    if text == known:
        actual.unlink(missing_ok=True)
        return
    actual.write_text(text, encoding="utf-8")
    pytest.fail(f"{actual} differs from {expected.name}; NARROWGAUGE_ACCEPT=1 accepts it")


class TestGolden:
    @pytest.mark.parametrize("width", [60, 80, 120])
    def test_audit(self, width):
        """An audit of two quantities reads as it did when somebody last looked at it."""
        check_golden(f"audit-{width}", rendered(audit_text(made.audit_record(), Path("audits/reserve")), width))

    @pytest.mark.parametrize("width", [60, 80])
    def test_troubled(self, width):
        """So does an audit of a kernel with everything wrong."""
        check_golden(f"troubled-{width}", rendered(audit_text(made.troubled_record(), None), width))

    def test_verdict(self):
        """So does the short form."""
        check_golden("verdict", rendered(verdict_text(made.audit_record(), Path("audits/reserve"))))

    @pytest.mark.parametrize("escapes", [True, False])
    def test_trial(self, escapes):
        """So does a trial run."""
        name = "trial-escapes" if escapes else "trial"
        check_golden(name, rendered(trial_text(made.trial_entry(escapes=escapes))))

    def test_missing_is_noticed(self, tmp_path, monkeypatch):
        """The comparison fails where it should, and saves the actual output."""
        monkeypatch.setattr(sys.modules[__name__], "GOLDEN", tmp_path)
        monkeypatch.delenv("NARROWGAUGE_ACCEPT", raising=False)
        (tmp_path / "a.txt").write_text("one\n", encoding="utf-8")
        with pytest.raises(pytest.fail.Exception):
            check_golden("a", "two\n")
        assert (tmp_path / "a.actual.txt").read_text(encoding="utf-8") == "two\n"
        check_golden("a", "one\n")
        assert not (tmp_path / "a.actual.txt").exists()


class TestOrder:
    def test_wrong_ladder_comes_first(self):
        """If the levels do not fit together, the very first words say so, with quantity, level and figures."""
        text = rendered(audit_text(made.troubled_record(), None))
        assert text.startswith("THE KERNEL OR THE COUPLING OF ITS DRAWS IS WRONG.")
        words = " ".join(text.split())
        assert "- value, level 2 against level 1: difference 0.123, standard error 0.0123, so 10.0 of them." in words
        assert words.index("PATHS WERE DROPPED.") < words.index("Audit of")
        assert "3 of 32,768 on level 1" in words
        assert "No verdict: the levels do not fit together." in words

    def test_sound_ladder_has_no_alarm(self):
        """An audit without trouble begins with the name of the kernel."""
        assert rendered(audit_text(made.audit_record(), None)).startswith("Audit of reserve.py:value\n")

    def test_alarms_in_the_short_form(self):
        """The short form does not leave the alarm out."""
        assert rendered(verdict_text(made.troubled_record(), None)).startswith("THE KERNEL OR THE COUPLING")

    def test_no_folder(self):
        """Without a folder nothing is said about files."""
        assert "Written to" not in rendered(audit_text(made.audit_record(), None))


class TestFigures:
    def test_never_across_a_threshold(self):
        """The undecided edge of 1.0497 (0.9996 to 1.0501) is not shown as 1.05 (1.00 to 1.05)."""
        assert "1.0497 (0.9996 to 1.0501)" in rendered(audit_text(made.audit_record(), None))

    def test_undecided_level(self):
        """An undecided level has estimate, interval, the reason and the paths needed."""
        words = flat(audit_text(made.audit_record(), None))
        assert (
            "Level 3 is undecided after 65,536 paths: edge 1.0497 (0.9996 to 1.0501); the interval is neither above 1 "
            "nor below 1.05, and the paths of the audit file ran out; about 1,300,000 paths would settle it."
        ) in words
        assert (
            "the mean shifts by 1.0e-04 (-1.3e-04 to 3.3e-04), and 2.50e-04 either way is this level's share of the "
            "target; how many paths would settle it cannot be told."
        ) in words

    def test_rare_correction(self):
        """A level whose correction is carried by too few paths says by how many."""
        words = flat(audit_text(made.troubled_record(), None))
        assert "does not know what it misses (effectively 12.3 of them, 50 are asked for)" in words

    def test_none_is_printed_with_its_bound(self):
        """No non-finite value is "none in N paths", with its bound; some are counted."""
        assert "none in 32,768 paths on levels 0 to 2 and 4 (at most 1 in 7,115)" in flat(
            audit_text(made.audit_record(), None)
        )
        words = flat(audit_text(made.troubled_record(), None))
        assert "2 in 65,536 paths on level 3 (at most 1 in 10,000)" in words
        assert "32,000 in 32,768 paths on level 4 (at most 98%)" in words
        assert "float16: nothing was measured" in words

    def test_dashes_are_explained(self):
        """Every kind of en dash in the tables of signal, noise and gain has a sentence with the reason."""
        words = flat(audit_text(made.troubled_record(), None))
        assert "\N{EN DASH} no noise of float16 on levels 0 to 4: the kernel raised." in words
        assert "\N{EN DASH} no noise of bfloat16 on level 4: non-finite values." in words
        assert "\N{EN DASH} no gain where no scheme is finite." in words

    def test_raised(self):
        """What the kernel raised in a format is shown with file and line."""
        expected = "On levels 0 to 4 the kernel raised ZeroDivisionError: division by zero (/home/user/reserve.py:7)."
        assert expected in flat(audit_text(made.troubled_record(), None))

    def test_assumed_costs(self):
        """Costs that nobody gave are called assumed beside gains, edges and savings."""
        assert "costs assumed" not in flat(audit_text(made.audit_record(), None))
        asked = {**made.ASKED, "assumed": ["cost.float64"]}
        text = rendered(audit_text(replace(made.audit_record(), asked=asked), None))
        assert text.count("costs assumed\n") + text.count("costs assumed  ") == 2 * (1 + 3)
        assert text.count("(99% interval, costs assumed)") == 2

    def test_assumptions(self):
        """Every default that was used is printed with its value."""
        assert (
            "Assumed, since the audit file does not say: [kernel] factors = 1; [target] largest_correction = none; "
            '[formats] narrow = ["float16", "bfloat16", "float32"]; [cost] draws = 0; [sampling] confidence = 0.99.'
        ) in flat(audit_text(made.audit_record(), None))

    def test_worthwhile_without_target(self):
        """What is worthwhile without a target is the default of the audit file, and is printed."""
        assert TargetTable(rmse=1.0).worthwhile == settings.WORTHWHILE
        assert "[target] worthwhile = 1.05" in flat(audit_text(made.troubled_record(), None))

    def test_admitted_rmse(self):
        """Without a target, the smallest RMSE that the bias of the paying levels admits is printed."""
        entry = made.with_arm(made.quantity_entry(), 1, "float16", admitted_rmse=0.0123)
        record = made.audit_record(value=entry)
        record = replace(record, asked={**made.ASKED, "target": None})
        assert "admits an RMSE of 0.0123 or more, which level 1 decides." in flat(audit_text(record, None))

    def test_weak_error_above_the_target(self):
        """A discretisation error above the target asks for more levels; just below it, it is not rounded to it."""
        entry = made.quantity_entry()
        assert "discretisation error of about 0.04999, which the target does not count." in flat(
            verdict_text(made.audit_record(), None)
        )
        entry = replace(entry, allocation=replace(entry.allocation, weak_error=0.0501))
        words = flat(verdict_text(made.audit_record(value=entry), None))
        assert "about 0.0501, which is more than the target: add levels." in words

    def test_two_rivals(self):
        """Where today is not the reference, the saving over each of them is printed."""
        asked = {**made.ASKED, "formats": {**made.ASKED["formats"], "today": "float32"}}
        words = flat(verdict_text(replace(made.audit_record(), asked=asked), None))
        assert "float32 alone costs 3.15 (3.10 to 3.20) times as much and float64 alone costs 3.15" in words


class TestFinest:
    @pytest.mark.parametrize(
        ("levels", "extrapolated", "reason", "words"),
        [
            ((None, None, None), False, "edge", "none"),
            ((None, None, 0), False, "budget", "not established (level 0 is not refuted)"),
            ((None, None, 3), False, "budget", "not established (up to level 3 not refuted)"),
            ((5, None, 5), False, "edge", "5"),
            ((5, None, 7), False, "budget", "5 (up to level 7 not refuted)"),
            ((8, None, None), False, "or finer, not extrapolated", "8 or finer, not extrapolated"),
            ((17, 17, 17), True, "extrapolated", "17 (extrapolated, measured to level 8)"),
            (
                (17, 14, 19),
                True,
                "extrapolated",
                "17 (extrapolated, measured to level 8; between 14 and 19 by its bounds)",
            ),
        ],
    )
    def test_words(self, levels, extrapolated, reason, words):
        """The finest paying level says whether it was measured, extrapolated, or is open, in words."""
        level, cautious, possible = levels
        entry = FinestEntry(level=level, cautious=cautious, possible=possible, extrapolated=extrapolated, reason=reason)
        assert finest_words(entry, 8) == words

    def test_sentences(self):
        """Each format has one sentence: level, why it ends there, which quantity decides, and what lies apart."""
        words = flat(verdict_text(made.audit_record(), None))
        assert (
            "- float16: finest level where it still pays: 2 (up to level 3 not refuted); on level 3 the paths ran out "
            "before the edge was settled. The quantity option decides."
        ) in words
        assert (
            "- bfloat16: finest level where it still pays: 0 (up to level 2 not refuted); on level 1 it is not known "
            "whether rounding shifts the mean by more than its share of the target. The quantity option decides. "
            "It pays on level 2 too, but not on all levels up to there."
        ) in words

    @pytest.mark.parametrize(
        ("level", "possible", "words"),
        [
            (2, 3, "Low precision pays in float16, bfloat16 and float32 (from level 0 on, measured to level 4)."),
            (None, 3, "It is undecided whether low precision pays in float16, bfloat16 or float32"),
            (None, None, "Low precision does not pay in float16, bfloat16 or float32"),
        ],
    )
    def test_lead(self, level, possible, words):
        """The first sentence says whether low precision pays at all."""
        record = made.audit_record()
        entry = FinestEntry(level=level, cautious=None, possible=possible, extrapolated=False, reason="budget")
        finest = {name: made.decided(entry, "option") for name in made.FORMATS}
        record = replace(record, verdict=replace(record.verdict, finest_paying_level=finest))
        assert f"Verdict {'=' * 80} {words}" in flat(verdict_text(record, None))

    def test_every_reason_has_words(self):
        """Every reason that a judgement can give is put in words."""
        assert set(get_args(Reason)) == set(tables.REFUSED) == set(tables.UNSETTLED)


DOCUMENTS = {
    "audit": lambda: audit_text(made.audit_record(), Path("audits/reserve")),
    "troubled": lambda: audit_text(made.troubled_record(), None),
    "trial": lambda: trial_text(made.trial_entry(escapes=True)),
}


class TestTerminal:
    @pytest.mark.parametrize("width", [60, 80, 120])
    @pytest.mark.parametrize("name", DOCUMENTS)
    def test_width(self, name, width):
        """No line is longer than the terminal is wide."""
        assert max(cell_len(line) for line in rendered(DOCUMENTS[name](), width).split("\n")) <= width

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
        for place in ("Audit of {}", "Quantity {}", "- {}", "float16 for {}", "does not pay: {}", "Written to {}:"):
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
        assert f"Quantity{name}" in text.replace("\n", "").replace(" ", "")


PLAN = SimpleNamespace(
    levels=tuple(
        SimpleNamespace(level=level, steps=2 * 2**level, paths_first_look=32768, paths_most=1048576)
        for level in range(7)
    ),
    path_steps=25_600_000,
    most_path_steps=819_200_000,
    seconds=40.4,
    most_seconds=1292.8,
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
