"""The text of an audit: what stands where, in words.

Whole outputs are held against the files in golden/. On a difference the actual output is saved beside them, as
NAME.actual.txt; look at it, and accept it with NARROWGAUGE_ACCEPT=1 in the environment of pytest.
"""

from __future__ import annotations

import os
import re
import sys
from pathlib import Path
from typing import get_args

import made_records as made
import pages
import pytest
from msgspec.structs import replace
from rendering import flat, rendered

from narrowgauge.judge.accumulation import AccumulationFit, rejected
from narrowgauge.judge.schemes import Reason
from narrowgauge.record.audit import FinestEntry
from narrowgauge.report import tables
from narrowgauge.report.notes import REJECTED_BELOW, accumulation
from narrowgauge.report.questions import QUESTIONS
from narrowgauge.report.text import audit_text, trial_text, verdict_text
from narrowgauge.report.verdict import finest_words

GOLDEN = Path(__file__).parent / "golden"


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
        assert "No verdict: the levels of this simulation do not fit together, so its figures" in words

    def test_sound_ladder_has_no_alarm(self):
        """An audit without trouble begins with the name of the kernel."""
        assert rendered(audit_text(made.audit_record(), None)).startswith("Audit of reserve.py:value\n")

    def test_without_a_finite_reference_there_is_no_verdict(self):
        """As on the page."""
        said = flat(verdict_text(pages.nonfinite_record(), None))
        assert "on levels 0 to 4 float64 itself has no results of finite variance to compare with. What follows" in said

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

    def test_nor_does_a_noise_across_the_signal(self):
        """A noise of 1.04 above a signal of 1.02 is not shown as 1.0."""
        entry = made.with_arm(made.quantity_entry(), 4, "bfloat16", error_variance=1.04**2)
        reference = replace(entry.levels[4].reference, level_variance=1.02**2)
        entry = made.with_level(entry, 4, reference=reference)
        words = flat(audit_text(made.audit_record(value=entry), None), 120)
        assert re.search(r" 4 32 32,768 1\.02 0\.0021 1\.04 2\.6e-07 ", words)

    def test_nor_does_the_p_value_of_a_law(self):
        """0.00099996 is below the limit of the test by which the judge rejects a law."""
        assert rejected(AccumulationFit(fit_p=0.00099996))
        assert not rejected(AccumulationFit(fit_p=REJECTED_BELOW))
        entry = made.quantity_entry()
        one = entry.accumulation["float16"]
        badly = replace(one, error=replace(one.error, fit_p=0.00099996))
        (line,) = (line for line in accumulation(replace(entry, accumulation={"float16": badly})) if "p =" in line)
        assert line.endswith("p = 9.9996e-04.")

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

    def test_a_level_on_which_nothing_varies(self):
        """It has no scheme for want of a variance, not of finite values."""
        entry = made.quantity_entry()
        reference = replace(entry.levels[0].reference, level_variance=0.0)
        words = flat(
            audit_text(made.audit_record(value=made.with_level(entry, 0, reference=reference, best=None)), None)
        )
        assert " 0 nothing varies" in words
        assert "\N{EN DASH} no gain where nothing varies." in words
        assert "finite scheme" not in words
        assert "is finite" not in words

    def test_raised(self):
        """What the kernel raised in a format is shown with file and line."""
        expected = "On levels 0 to 4 the kernel raised ZeroDivisionError: division by zero (/home/user/reserve.py:7)."
        assert expected in flat(audit_text(made.troubled_record(), None))

    def test_assumed_costs(self):
        """Costs that nobody gave are called assumed beside gains, edges and savings."""
        assert "costs assumed" not in flat(audit_text(made.audit_record(), None))
        asked = {**made.ASKED, "assumed": ["cost.float64"]}
        document = audit_text(replace(made.audit_record(), asked=asked), None)
        text = rendered(document)
        assert text.count("costs assumed\n") + text.count("costs assumed  ") == 2 * (1 + 3)
        assert flat(document).count("(99% interval, costs assumed)") == 2
        assert "(by the variances measured, or their upper bounds, costs assumed)" in flat(document)

    def test_assumptions(self):
        """Every default that was used is printed with its value."""
        assert (
            "Assumed, since the audit file does not say: [kernel] factors = 1; [target] largest_correction = none; "
            '[formats] narrow = ["float16", "bfloat16", "float32"]; [cost] draws = 0; [sampling] confidence = 0.99.'
        ) in flat(audit_text(made.audit_record(), None))

    def test_what_was_worked_out_is_not_called_assumed(self):
        """A kernel that draws for itself has no array of draws, and its audit file may not say how many there are."""
        asked = {**made.ASKED, "kernel": {**made.ASKED["kernel"], "takes": "rng"}}
        text = flat(audit_text(replace(made.audit_record(), asked=asked), None))
        assert "Assumed, since the audit file does not say: [target] largest_correction = none;" in text

    def test_worthwhile_without_target(self):
        """What is worthwhile without a target is printed as the record's rules have it."""
        record = made.troubled_record()
        assert "[target] worthwhile = 1.05" in flat(audit_text(record, None))
        other = replace(record, rules=replace(record.rules, worthwhile=1.25))
        assert "[target] worthwhile = 1.25" in flat(audit_text(other, None))

    def test_rules_are_the_record_s(self):
        """Limits are printed as the record has them, not as this version of the program would set them."""
        record = made.troubled_record()
        rules = replace(record.rules, telescoping_se=4.5, least_effective_size=70)
        words = flat(audit_text(replace(record, rules=rules), None))
        assert "They differ by more than 4.5 standard errors" in words
        assert "(effectively 12.3 of them, 70 are asked for)" in words
        record = made.audit_record()
        words = flat(audit_text(replace(record, rules=replace(record.rules, levels_sharing=10)), None))
        assert "1.25e-04 either way is this level's share of the target" in words

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


class TestPlan:
    def test_one_plan_for_several_quantities(self):
        """Several quantities have one table of paths, in the verdict, which says which of them needs so many."""
        text = rendered(audit_text(made.audit_record(), None))
        assert text.count("share\n") == 1
        assert text.index("Paths for all quantities together") > text.index(QUESTIONS["schemes"].words)
        assert "    0  float16 with float64  1,175,885  option       1,878  output  99.9999%" in text
        assert "Paths for an RMSE" not in text
        words = " ".join(text.split())
        assert (
            "A run that serves all quantities takes on each level one scheme and the most paths that any of them "
            "needs. It costs 9,000 in the unit of the cost table; planned likewise, float64 alone costs 3.00 times as "
            "much (by the variances measured, or their upper bounds)."
        ) in words
        assert "as the scheme that serves all quantities on each level (99% interval)." in words

    def test_one_quantity(self):
        """A single quantity has its plan beside what it saves, and nothing is said about others."""
        text = rendered(audit_text(made.audit_record(value=made.quantity_entry()), None))
        assert text.index("Paths for an RMSE of 0.05 in value") > text.index(QUESTIONS["schemes"].words)
        words = " ".join(text.split())
        assert "all quantities" not in words
        assert "as the cheapest scheme on each level (99% interval). The cheapest schemes cost 9,000" in words

    @pytest.mark.parametrize(
        ("reason", "words"),
        [("no target", "the audit file has no [target]"), ("b: a level without a finite scheme", None)],
    )
    def test_no_common_plan(self, reason, words):
        """Where there is no plan for all quantities the reason is said once."""
        record = made.audit_record()
        plan = replace(record.verdict.plan, levels=[], cost=None, saving=None, reason=reason)
        text = flat(verdict_text(replace(record, verdict=replace(record.verdict, plan=plan)), None))
        assert text.count("planned") == 1
        assert f"No run that serves all quantities is planned: {words or reason}." in text

    @pytest.mark.parametrize("several", [True, False])
    def test_hardly_seen_corrections_are_marked(self, several):
        """A plan that rests on the upper bound of a variance says on which levels."""
        entry = made.quantity_entry()
        record = made.audit_record() if several else made.audit_record(value=entry)
        said = "On level 0 too few corrections were seen for their variance to be known: their paths follow from its"
        assert flat(audit_text(record, None)).count(said) == 1
        sure = [replace(one, bounded=False) for one in entry.allocation.levels]
        entry = replace(entry, allocation=replace(entry.allocation, levels=sure))
        assert said not in flat(audit_text(made.audit_record(value=entry), None))


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
            ((8, None, None), False, "or finer, the law does not fit", "8 or finer, the law does not fit"),
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
            (2, 3, "Yes: at the same accuracy, the cheapest mix of formats costs 31.8%"),
            (
                None,
                3,
                "Not decided yet: whether lower precision pays in float16, bfloat16 or float32 needs more paths.",
            ),
            (None, None, "No: lower precision does not pay here. Keep float64."),
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
